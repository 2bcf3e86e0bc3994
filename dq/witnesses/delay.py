"""How much earlier or later a witness hears what the strain shows.

The delay shapes the veto's window only. Whether a channel is a witness was decided with
the symmetric window, so nothing here makes a channel more significant.
"""

from __future__ import annotations

import numpy as np

from dq.segments import NS
from dq.witnesses.joint import Activity

#: A shifted or narrower window must keep this share of the coincidences, on halves of
#: the time that it was not measured on (own choice).
KEPT = 0.95

#: Coincidences on which a delay may rest.
FEWEST = 10

#: Blocks that alternate between measuring and checking, s; longer than any window.
_BLOCK_S = 64.0


def measured_window(
    activity: Activity,
    times: np.ndarray,
    *,
    threshold: float,
    half_window_s: float,
    ladder_s: list[float],
) -> tuple[float, float, float]:
    """Give the window of a witness: delay, and reach before and after.

    Parameters
    ----------
    activity : Activity
    times : ndarray of int64, sorted
        Targets, nanoseconds.
    threshold, half_window_s : float
        Of the accepted combination.
    ladder_s : list of float
        Half-windows to choose from.

    Returns
    -------
    delay_s, before_s, after_s : float
        Strain minus channel; the symmetric window without delay where nothing
        narrower holds on both halves of the time.
    """
    plain = (0.0, half_window_s, half_window_s)
    loud = activity.snr >= threshold
    start, end, peak = (x[loud] for x in (activity.start, activity.end, activity.peak))
    row = _nearest(start, end, times, round(half_window_s * NS))
    met = row >= 0
    if np.count_nonzero(met) < FEWEST:
        return plain
    times, row = times[met], row[met]
    offset = times - peak[row]
    half = (times // round(_BLOCK_S * NS)) % 2
    if min(np.count_nonzero(half == 0), np.count_nonzero(half == 1)) < FEWEST // 2:
        return plain
    delay = int(np.median(offset))
    for reach_s in ladder_s:
        if reach_s >= half_window_s:
            break
        reach = round(reach_s * NS)
        shares = []
        for part in (0, 1):
            # the delay of one half, tried on the other
            other = int(np.median(offset[half != part]))
            mine = half == part
            shares.append(_share(start, end, row[mine], times[mine], other, reach))
        whole = _share(start, end, row, times, delay, reach)
        if min(*shares, whole) >= KEPT:
            return round(delay / NS, 6), reach_s, reach_s
    return plain


def _nearest(start, end, times, reach: int) -> np.ndarray:
    """Give the activity whose window holds each time, the nearest one; -1: none."""
    best = np.full(len(times), -1)
    gap = np.full(len(times), reach, dtype=np.int64)
    order = np.searchsorted(start, times)
    # neighbours by start; long activity before them is found by its running end
    for step in (-3, -2, -1, 0):
        at = order + step
        known = (at >= 0) & (at < len(start))
        at = np.clip(at, 0, max(len(start) - 1, 0))
        away = np.maximum(np.maximum(start[at] - times, times - end[at]), 0)
        nearer = known & (away <= gap) & ((away < gap) | (best < 0))
        best[nearer], gap[nearer] = at[nearer], away[nearer]
    return best


def _share(start, end, row, times, delay: int, reach: int) -> float:
    low, high = start[row] + delay - reach, end[row] + delay + reach
    return float(np.mean((times >= low) & (times < high)))
