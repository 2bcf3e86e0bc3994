"""Witnesses in their first form: each channel on its own, every trial counted.

For every auxiliary channel, every threshold of a ladder and every half-window of
another, the strain's transients inside the union of windows are counted. If the
channel had nothing to do with the strain, a fraction of them equal to the dead time
would fall inside (chance efficiency = dead time), so mu = N d, and the significance of
n is the Poisson one (Smith et al. 2011, Class. Quantum Grav. 28 235005).

Transients come in bursts, and a burst that falls into one window counts many times:
the Poisson law is then too narrow. For the best combination of a channel the strain is
therefore also shifted around the jointly analysed time many times; the ratio of
variance to mean of the shifted counts, the dispersion, divides count and expectation
before the chance is computed (quasi-Poisson, common practice in counting statistics).
It is never taken below 1. The trials are all combinations that were tested.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from dq.counting import poisson_significance
from dq.segments import NS, Segments, to_ns_array
from dq.tables import WITNESSES, conform
from dq.witnesses.windows import FusedTime, hits, union_of_windows

if TYPE_CHECKING:
    import pandas as pd

    from dq.config import Witnesses

#: Shifts that measure the dispersion; 400 give it to 7 %.
SHIFTS = 400

#: Shifts keep at least this far from no shift, s: beyond every window.
LEAST_SHIFT_S = 10.0

#: The golden ratio's fraction spreads shifts evenly and matches no period.
_GOLDEN = 0.6180339887498949

_SAFETY = {"yes": "safe", "no": "unsafe", "": "cannot tell"}


@dataclass(frozen=True)
class _Best:
    """The most significant combination of one channel."""

    threshold: float
    half_window: float
    count: int
    expected: float
    significance: float
    calibrated: float
    dispersion: float
    windows_hit: int
    windows: int
    dead_s: float
    total: int


def find_witnesses(
    strain: pd.DataFrame,
    auxiliary: Mapping[str, pd.DataFrame],
    *,
    analysed: Segments,
    auxiliary_analysed: Mapping[str, Segments],
    safety: Mapping[str, str],
    settings: Witnesses,
    target: str = "all",
) -> pd.DataFrame:
    """Say which auxiliary channels witness the strain's transients.

    Parameters
    ----------
    strain : pandas.DataFrame
        Columns of ``dq.tables.TRANSIENTS``.
    auxiliary : mapping of str to pandas.DataFrame
        The same for each auxiliary channel.
    analysed : Segments
        Judged time of the strain.
    auxiliary_analysed : mapping of str to Segments
    safety : mapping of str to str
        ``yes``, ``no`` or empty, from the channel list. A channel marked ``no`` is
        never accepted and takes no part in the trials.
    settings : dq.config.Witnesses
    target : str
        Name of what was tested, for the table.

    Returns
    -------
    pandas.DataFrame
        ``dq.tables.WITNESSES``: accepted channels in order of significance, then the
        rest.
    """
    times = np.sort(to_ns_array(strain["gps_time"].to_numpy(float)))
    best: dict[str, _Best | None] = {}
    trials = 0
    for name in sorted(auxiliary):
        if safety.get(name, "") == "no":
            best[name] = None
            continue
        joint = analysed & auxiliary_analysed.get(name, Segments.none())
        best[name], tested = _best_of(times, auxiliary[name], joint, settings)
        trials += tested
    rows = [
        _row(name, best[name], safety.get(name, ""), trials, settings, target)
        for name in best
    ]
    return _ordered(rows)


def _best_of(times, transients, joint: Segments, settings) -> tuple[_Best | None, int]:
    """Go through both ladders; give the best combination and the number tested."""
    if not joint:
        return None, 0
    fused = FusedTime(joint)
    inside = fused.position(times[joint.contains(times)])
    when = to_ns_array(transients["gps_time"].to_numpy(float))
    order = np.argsort(when, kind="stable")
    when, snr = when[order], transients["snr"].to_numpy(float)[order]
    tested, best = 0, None
    for threshold in settings.snr_thresholds:
        loud = when[snr >= threshold]
        if len(loud) == 0 or len(inside) == 0:
            continue
        for half_window in settings.half_windows_s:
            found = _combination(inside, loud, fused, threshold, half_window)
            if found is None:
                continue
            tested += 1
            # at equal significance the one that costs less time
            if best is None or (found.significance, -found.dead_s) > (
                best.significance,
                -best.dead_s,
            ):
                best = found
    if best is None:
        return None, tested
    return _calibrated(best, inside, when[snr >= best.threshold], fused), tested


def _windows(loud, fused: FusedTime, half_window: float):
    starts, ends = union_of_windows(loud, round(half_window * NS))
    low, high = fused.position(starts), fused.position(ends)
    kept = high > low
    return low[kept], high[kept]


def _combination(inside, loud, fused, threshold, half_window) -> _Best | None:
    low, high = _windows(loud, fused, half_window)
    dead = int(np.sum(high - low))
    if dead == 0 or dead >= fused.total:
        return None
    hit = hits(inside, low, high)
    hit = hit[hit >= 0]
    expected = len(inside) * dead / fused.total
    significance = float(poisson_significance(len(hit), expected))
    return _Best(
        threshold=threshold,
        half_window=half_window,
        count=len(hit),
        expected=expected,
        significance=significance,
        calibrated=significance,
        dispersion=1.0,
        windows_hit=len(np.unique(hit)),
        windows=len(low),
        dead_s=dead / NS,
        total=len(inside),
    )


def _calibrated(best: _Best, inside, loud, fused: FusedTime) -> _Best:
    low, high = _windows(loud, fused, best.half_window)
    dispersion = count_dispersion(inside, low, high, fused.total)
    calibrated = poisson_significance(
        best.count / dispersion, best.expected / dispersion
    )
    return _Best(
        **{
            **best.__dict__,
            "dispersion": dispersion,
            "calibrated": min(float(calibrated), best.significance),
        }
    )


def count_dispersion(
    positions: np.ndarray, starts: np.ndarray, ends: np.ndarray, total: int
) -> float:
    """Give variance over mean of the counts in windows under circular shifts.

    Parameters
    ----------
    positions, starts, ends : ndarray of int64
        Events and windows on the fused time line, nanoseconds.
    total : int
        Length of the line.

    Returns
    -------
    float
        At least 1.
    """
    shifts = (np.arange(1, SHIFTS + 1) * _GOLDEN % 1.0 * total).astype(np.int64)
    least = min(round(LEAST_SHIFT_S * NS), total // 4)
    shifts = shifts[(shifts >= least) & (shifts <= total - least)]
    counts = np.empty(len(shifts))
    # rows of bounded size: a million shifted events at a time
    step = max(1_000_000 // max(len(positions), 1), 1)
    for k in range(0, len(shifts), step):
        moved = (positions[None, :] + shifts[k : k + step, None]) % total
        counts[k : k + step] = np.sum(hits(moved, starts, ends) >= 0, axis=1)
    mean = counts.mean() if len(counts) else 0.0
    if mean == 0.0:
        return 1.0
    return max(float(counts.var() / mean), 1.0)


def _row(name, best: _Best | None, safety, trials, settings, target) -> dict:
    row = {"channel": name, "target": target, "safety": _SAFETY[safety]}
    row["accepted"] = False
    if safety == "no":
        return {**row, "reason": "marked unsafe in the channel list: never used"}
    if best is None:
        return {**row, "reason": "no transients in jointly analysed time"}
    logarithm = min(np.log10(max(trials, 1)) - best.calibrated, 0.0)
    p_value = float(10.0**logarithm)
    row |= {
        "snr_threshold": best.threshold,
        "half_window_s": best.half_window,
        "coincidences": best.count,
        "expected": best.expected,
        "significance": best.significance,
        "p_value": p_value,
        "efficiency": best.count / best.total,
        "dead_time_s": best.dead_s,
        "use_fraction": best.windows_hit / best.windows,
        "calibrated": best.calibrated,
    }
    bound = settings.false_alarm_probability
    if best.windows_hit < settings.min_coincidences:
        return {
            **row,
            "reason": f"only {best.windows_hit} separate coincidences, fewer than "
            f"{settings.min_coincidences}",
        }
    burst = ""
    if best.dispersion > 1.5:
        burst = f"; shifted counts scatter {best.dispersion:.1f} times Poisson"
    if p_value > bound:
        reason = f"not significant: p = {p_value:.2g} > {bound:g} over {trials} trials"
        return {**row, "reason": reason + burst}
    reason = f"accepted: p = {p_value:.2g} over {trials} trials"
    return {**row, "accepted": True, "reason": reason + burst}


def _ordered(rows: list[dict]) -> pd.DataFrame:
    import pandas as pd

    def key(row):
        strength = row.pop("calibrated", -1.0)
        return (not row["accepted"], -strength, row["channel"])

    rows = [row for _, row in sorted((key(r), r) for r in rows)] if rows else []
    for number, row in enumerate(rows, start=1):
        row["order"] = number if row["accepted"] else None
    frame = pd.DataFrame(rows) if rows else pd.DataFrame({"channel": []})
    return conform(frame, WITNESSES)
