"""What a sorter is trained on, measured in the data around hand labels.

Three kinds of rows: the transients themselves, quieter copies of the labelled ones in
other noise, and simulated chirps planted where the labels lie.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pandas as pd

from dq.config import Config
from dq.families import match_labels
from dq.night.channel import ChannelResult
from dq.night.judge import transient_ids

#: Seconds around a label in which transients are found: the neighbourhood that
#: features look at reaches 30 s.
_AROUND_S = 32

#: Simulated chirps that are planted: a miss rate of 3 % shows with an interval from
#: 1 to 7 %.
GUARD_CHIRPS = 150

#: Quieter copies of each labelled transient (own choice: as many as there are octaves
#: of SNR between the threshold and most labelled ones).
COPIES = 2

#: Gives the features of a channel's transients, one row each.
FeaturesAt = Callable[[Config, str, pd.DataFrame], pd.DataFrame]


def measure_labelled(
    config: Config, hand: pd.DataFrame, features_at: FeaturesAt | None = None
) -> tuple[pd.DataFrame, pd.DataFrame | None]:
    """Find and measure the transients at labels, their copies, and chirps.

    Parameters
    ----------
    config : Config
    hand : pandas.DataFrame
        From ``dq.store.read_labels``.
    features_at : callable, optional
        Stands in for the night's own features; then there are no copies and no
        chirps.

    Returns
    -------
    table : pandas.DataFrame
        ``transient_id, gps_time, gps_start, gps_end, snr, parent`` and features.
    chirps : pandas.DataFrame or None
        Features of simulated chirps.
    """
    strain = config.site.strain
    hand = hand[hand["channel"] == strain]
    found = _found(config, hand)
    transients = found.transients
    if features_at is not None:
        measured = features_at(config, strain, transients)
        return _table(transients, measured, transient_ids(transients)), None
    from dq.night.copies import measure_copies
    from dq.night.guard import chirp_features
    from dq.night.strain_features import measure_transients

    data, options = _strain_of(config)
    measured = measure_transients(data, transients, **options).table
    own = _table(transients, measured, transient_ids(transients))
    labelled = np.unique(match_labels(hand, transients).matched["transient"])
    examples = transients.iloc[labelled].reset_index(drop=True)
    copies = measure_copies(
        data, examples, per_example=COPIES, among=transients, **options
    )
    table = pd.concat([own, copy_rows(examples, copies)], ignore_index=True)
    chirps = chirp_features(data, found, count=GUARD_CHIRPS, **options)
    return table, chirps


def copy_rows(examples: pd.DataFrame, copies: pd.DataFrame) -> pd.DataFrame:
    """Give copies as rows of a feature table that name their parents.

    Parameters
    ----------
    examples : pandas.DataFrame
        Columns of ``dq.tables.TRANSIENTS``, and ``transient_id`` where they have one.
    copies : pandas.DataFrame
        From :func:`dq.night.copies.measure_copies`.
    """
    names = examples.get("transient_id")
    names = np.array(transient_ids(examples) if names is None else names, dtype=object)
    of = copies["parent"].to_numpy(int)
    rows = examples.iloc[of]
    measured = copies.drop(columns=["parent", "snr"])
    table = _table(
        rows.assign(snr=copies["snr"].to_numpy(float)),
        measured,
        [f"{names[i]}-copy{k + 1}" for k, i in enumerate(of)],
    )
    return table.assign(parent=names[of])


def _found(config: Config, hand: pd.DataFrame) -> ChannelResult:
    """Find the transients near the labels."""
    from dq.night.find import find_in_channel

    parts = [
        find_in_channel(config, config.site.strain, start=first, end=last)
        for first, last in _stretches(hand["gps_time"].to_numpy(float))
    ]
    analysed = parts[0].analysed
    for part in parts[1:]:
        analysed |= part.analysed
    transients = pd.concat([p.transients for p in parts], ignore_index=True)
    return replace(parts[0], transients=transients, analysed=analysed)


def _table(transients: pd.DataFrame, measured: pd.DataFrame, names) -> pd.DataFrame:
    """Put names, times and SNR before the features; drop what was not measured."""
    about = transients[["gps_time", "gps_start", "gps_end", "snr"]]
    about = about.reset_index(drop=True).assign(transient_id=names, parent="")
    table = pd.concat([about, measured.reset_index(drop=True)], axis=1)
    return table[measured.notna().any(axis=1).to_numpy()].reset_index(drop=True)


def _stretches(times: np.ndarray) -> list[tuple[int, int]]:
    """Merge the seconds around the labels into stretches."""
    out: list[tuple[int, int]] = []
    for t in np.sort(times):
        first, last = int(np.floor(t)) - _AROUND_S, int(np.ceil(t)) + _AROUND_S
        if out and first <= out[-1][1]:
            out[-1] = (out[-1][0], max(last, out[-1][1]))
        else:
            out.append((max(first, 0), last))
    return out


def _strain_of(config: Config):
    """Give the strain's data and how a night analyses it."""
    from dq.night.inputs import read_inputs

    inputs = read_inputs(config)
    row = inputs.strain
    options = {
        "ready": inputs.wanted,
        "config": config,
        "f_low_hz": row.f_low_hz,
        "f_high_hz": row.f_high_hz,
    }
    return inputs.store.channel(row.name), options
