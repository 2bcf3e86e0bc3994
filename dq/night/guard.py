"""Simulated chirps planted into the user's own strain, measured like any transient.

They teach the sorter what a compact binary looks like in this noise, so that no family
of noise takes in a real signal, whether or not anybody labelled one.
"""

from __future__ import annotations

import numpy as np
import pandas as pd

from dq.chirp import last_orbit_frequency
from dq.config import Config
from dq.families import draw_chirps
from dq.features import NAMES
from dq.night.channel import ChannelResult, analyse_channel
from dq.night.planting import NEAR_S, PlantedData, is_new, plan_runs, scaled
from dq.night.signals import Signal, chirp_signal
from dq.night.strain_features import measure_transients
from dq.segments import Segments

#: SNR of the simulated chirps, evenly in logarithm: from where searches look to where
#: nobody could miss one.
SNR_RANGE = (7.0, 40.0)

#: Times that the same data are gone over when they are too short for all chirps.
_MOST_PASSES = 8


def chirp_features(
    data,
    found: ChannelResult,
    *,
    ready: Segments | None,
    config: Config,
    count: int,
    f_low_hz: float | None = None,
    f_high_hz: float | None = None,
) -> pd.DataFrame:
    """Plant chirps of many masses, find them and measure them.

    Parameters
    ----------
    data : dq.store.ChannelData
        The strain.
    found : ChannelResult
        What was found without them; they are spread over its analysed time.
    ready, config, f_low_hz, f_high_hz
        As :func:`dq.night.channel.analyse_channel` takes them.
    count : int
        Chirps wanted.

    Returns
    -------
    pandas.DataFrame
        Columns ``dq.features.NAMES``; a row for each chirp that the finder found,
        ``count`` at most.
    """
    tables: list[pd.DataFrame] = []
    rows = 0
    for number in range(_MOST_PASSES):
        for run in plan_runs(found.analysed, count - rows):
            rng = np.random.default_rng([number, run.start_ns // 1_000_000_000])
            signals = [_draw(t, rng, found) for t in run.times]
            planted = PlantedData(
                data, [s for s in (scaled(data, found, x) for x in signals) if s]
            )
            band = {"f_low_hz": f_low_hz, "f_high_hz": f_high_hz}
            table = analyse_channel(
                planted,
                ready=ready,
                start_ns=run.start_ns,
                end_ns=run.end_ns,
                config=config,
                **band,
            ).transients
            mine = _theirs(table, signals, found.transients)
            measured = measure_transients(
                planted,
                table.iloc[mine].reset_index(drop=True),
                ready=ready,
                config=config,
                among=table,
                **band,
            ).table
            tables.append(measured[measured.notna().all(axis=1)])
            rows += len(tables[-1])
        if rows >= count or not tables:
            break
    if not tables:
        return pd.DataFrame(columns=list(NAMES), dtype=float)
    return pd.concat(tables, ignore_index=True).iloc[:count]


def _draw(time_ns: int, rng: np.random.Generator, found: ChannelResult) -> Signal:
    """Draw a chirp that ends within 8 s of a time."""
    time_ns += int(rng.integers(-8_000_000_000, 8_000_000_000))
    (first, second, phase), *_ = draw_chirps(1, rng=rng)
    snr = float(np.exp(rng.uniform(*np.log(SNR_RANGE))))
    # the last octaves hold most of the energy, and all of what is heard as a sweep
    last = min(float(last_orbit_frequency(first, second)), 0.9 * found.f_high_hz)
    return chirp_signal(
        time_ns,
        (first, second),
        phase=phase,
        snr=snr,
        low_hz=max(found.f_low_hz, 0.2 * last),
        high_hz=found.f_high_hz,
    )


def _theirs(table: pd.DataFrame, signals: list[Signal], before: pd.DataFrame):
    """Give the row of the loudest new transient at each chirp's end."""
    new = is_new(table, before)
    start, end = table["gps_start"].to_numpy(), table["gps_end"].to_numpy()
    snr = table["snr"].to_numpy()
    rows = []
    for signal in signals:
        at = signal.time_ns / 1e9
        here = np.flatnonzero(new & (start < at + NEAR_S) & (end > at - NEAR_S))
        if len(here):
            rows.append(int(here[snr[here].argmax()]))
    return sorted(set(rows))
