"""Real records sorted into event and quiet by the tool's own features.

``python tests/real/event_or_quiet.py`` measures windows of six seconds in the seismic
records that ``obspy`` ships: at the four local earthquakes that four stations recorded,
and in quiet stretches of the same records and of three records without an event. Each
record is left out in turn, the family sorter is trained on the others, and the score is
printed with its exact interval.
"""

from __future__ import annotations

import sys
import warnings
from pathlib import Path

import numpy as np
import pandas as pd

sys.path.insert(0, str(Path(__file__).parents[1]))
sys.path.insert(0, str(Path(__file__).parent))

import seismometers
from memory_channel import NS, MemoryChannel

from dq.config import parse_config
from dq.counting import clopper_pearson
from dq.families import FamilySorter
from dq.features import FEATURES
from dq.night.strain_features import measure_transients

#: Records without an earthquake: an hour of two sensors, and two minutes of another.
QUIET = ("ref_STS2", "ref_unknown", "timingquality.mseed")

#: Seconds before an onset and after it.
BEFORE_S, AFTER_S = 1.0, 5.0

GPS = 1_000_000_000


def records() -> dict[str, tuple[float, np.ndarray, list[float]]]:
    """Give rate, samples and event onsets of each record."""
    out = {}
    for trace in seismometers.load():
        onsets = list(seismometers.EARTHQUAKES_S)
        out[trace.id] = (trace.stats.sampling_rate, trace.data.astype(float), onsets)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        import obspy

        folder = Path(obspy.__file__).parent / "signal" / "tests" / "data"
        for name in QUIET:
            trace = obspy.read(str(folder / name))[0]
            values = trace.data[: int(600 * trace.stats.sampling_rate)].astype(float)
            out[name] = (trace.stats.sampling_rate, values, [])
    return out


def windows(seconds: float, onsets: list[float]) -> list[tuple[float, str]]:
    """Give onsets of windows and what they hold; quiet ones keep clear of events."""
    found = [(t, "event") for t in onsets]
    for t in np.arange(12.0, seconds - 12.0, 11.0):
        # an earthquake's coda is no quiet stretch
        if all(t + AFTER_S < e - 2 or t - BEFORE_S > e + 20 for e in onsets):
            found.append((float(t), "quiet"))
    return found


def measured() -> pd.DataFrame:
    """Give the features of all windows with their record and what they hold."""
    config = parse_config(
        {
            "site": {"name": "Seismometers", "strain": "X"},
            "data": {"files": ["x.h5"], "channels": "channels.csv"},
        }
    )
    parts = []
    for name, (rate, values, onsets) in records().items():
        found = windows(len(values) / rate, onsets)
        onset = GPS + np.array([t for t, _ in found])
        table = pd.DataFrame(
            {
                "gps_time": onset + 0.5,
                "gps_start": onset - BEFORE_S,
                "gps_end": onset + AFTER_S,
                "f_low_hz": 2.0,
                "frequency_hz": 8.0,
                "f_high_hz": 0.3 * rate,
                "snr": 10.0,
            }
        )
        data = MemoryChannel(name, int(rate), GPS * NS, values)
        features = measure_transients(data, table, ready=None, config=config).table
        features = features.assign(record=name, holds=[h for _, h in found])
        parts.append(features)
    out = pd.concat(parts, ignore_index=True)
    return out[out["duration_s"].notna()].reset_index(drop=True)


def score() -> tuple[int, int, pd.DataFrame]:
    """Give right ones, all, and the table of what was taken for what."""
    table = measured()
    # where a window lies in its record tells nothing of what it holds
    shape = [f.name for f in FEATURES if f.group != "context"]
    features = table[shape]
    said = np.full(len(table), "", dtype=object)
    for name in table["record"].unique():
        out = (table["record"] == name).to_numpy()
        sorter = FamilySorter(n_trees=100).fit(
            features[~out],
            table["holds"].to_numpy()[~out],
            groups=np.arange(np.count_nonzero(~out)) // 4,
        )
        said[out] = sorter.predict(features[out])
    right = int((said == table["holds"]).sum())
    return right, len(table), pd.crosstab(table["holds"], said)


if __name__ == "__main__":
    right, total, confusion = score()
    low, high = clopper_pearson(right, total)
    print(confusion.to_string())
    print(f"right: {right} of {total} ({low:.3f} to {high:.3f})")
