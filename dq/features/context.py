"""What else happens around a transient: neighbours and repetition.

Neighbours are transients of the same channel, counted by their peaks. Nothing here
looks at a witness.
"""

from __future__ import annotations

import numpy as np

from dq.features.grouped import ratio
from dq.features.spec import group_of

#: Gaps beyond this count as this, s.
GAP_LIMIT_S = 30.0

FEATURES = group_of(
    "context",
    ("neighbours_1s", "1", "other transients within 1 s on either side"),
    ("neighbours_10s", "1", "other transients within 10 s on either side"),
    ("gap_s", "s", "time to the nearest other transient, at most 30 s"),
    ("gap_regularity", "1", "shorter over longer of the gaps before and after"),
    ("band_neighbours_10s", "1", "those whose peak lies within an octave of its own"),
)


def measure_context(
    times: np.ndarray, frequencies: np.ndarray, all_times, all_frequencies
) -> dict[str, np.ndarray]:
    """Measure the group; see ``FEATURES``.

    Parameters
    ----------
    times, frequencies : ndarray, shape (n,)
        Peaks of the transients to be measured, s and Hz.
    all_times, all_frequencies : ndarray, shape (m,)
        Peaks of all transients of the channel, the former among them.
    """
    order = np.argsort(all_times, kind="stable")
    every, pitch = np.asarray(all_times)[order], np.asarray(all_frequencies)[order]
    # a transient is not its own neighbour, nor is the other half of a rounding
    before = np.searchsorted(every, times - 1e-5, side="left")
    after = np.searchsorted(every, times + 1e-5, side="right")
    counts = {}
    for reach in (1.0, 10.0):
        low = np.searchsorted(every, times - reach, side="left")
        high = np.searchsorted(every, times + reach, side="right")
        counts[reach] = (before - low) + (high - after)
    low = np.searchsorted(every, times - 10.0, side="left")
    high = np.searchsorted(every, times + 10.0, side="right")
    alike = np.zeros(len(times))
    for i in range(len(times)):
        near = np.r_[low[i] : before[i], after[i] : high[i]]
        alike[i] = np.sum(np.abs(np.log2(pitch[near] / frequencies[i])) <= 1.0)
    padded = np.concatenate([[-np.inf], every, [np.inf]])
    gaps = np.stack([times - padded[before], padded[after + 1] - times], axis=1)
    gaps = np.minimum(gaps, GAP_LIMIT_S)
    return {
        "neighbours_1s": counts[1.0].astype(float),
        "neighbours_10s": counts[10.0].astype(float),
        "gap_s": gaps.min(axis=1),
        "gap_regularity": ratio(gaps.min(axis=1), gaps.max(axis=1)),
        "band_neighbours_10s": alike,
    }
