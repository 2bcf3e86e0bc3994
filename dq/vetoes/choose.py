"""Which vetoes to apply under a dead-time budget.

Faults come first: their data cannot be used whatever the budget says, and where they
alone exceed it no witness veto is taken. Witness vetoes are then taken greedily by
transients removed per second of dead time added, as long as they fit. The best single
veto that fits is compared at the end and wins if it removes more (Khuller, Moss & Naor
1999, Inf. Proc. Lett. 70 39): greed alone can fall into the trap of a cheap small gain
that shuts out a large one. Dead time is that of the union, so vetoes that share time
pay once; the guarantees proved for added-up costs are outside this rule. Ties go to the
veto that stands earlier in the table.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from typing import TYPE_CHECKING

import numpy as np

from dq.segments import NS, Segments, to_ns_array

if TYPE_CHECKING:
    import pandas as pd


@dataclass(eq=False)
class _Candidate:
    name: str
    segments: Segments
    holds: np.ndarray


def choose_vetoes(
    vetoes: pd.DataFrame,
    strain: pd.DataFrame,
    *,
    analysed: Segments,
    max_dead_time: float,
) -> tuple[list[str], dict[str, str]]:
    """Choose vetoes within the budget.

    Parameters
    ----------
    vetoes : pandas.DataFrame
        ``dq.tables.VETOES``.
    strain : pandas.DataFrame
        ``dq.tables.TRANSIENTS``.
    analysed : Segments
    max_dead_time : float
        Fraction of the analysed time.

    Returns
    -------
    chosen : list of str
        Names in the order chosen.
    refused : dict of str to str
        The others, with the reason.
    """
    times = to_ns_array(strain["gps_time"].to_numpy(float))
    times = times[analysed.contains(times)]
    # as written in decimals: 0.1 of 1000 s is 100 s, not a nanosecond less
    budget = int(Fraction(str(max_dead_time)) * analysed.total_ns)
    taken, removed = Segments.none(), np.zeros(len(times), dtype=bool)
    chosen, candidates = [], []
    for name, rows in vetoes.groupby("veto", sort=False):
        segments = analysed & Segments.from_arrays(
            rows["gps_start"].to_numpy(np.int64), rows["gps_end"].to_numpy(np.int64)
        )
        if rows["source"].iloc[0] == "fault":
            chosen.append(str(name))
            taken, removed = taken | segments, removed | segments.contains(times)
        else:
            holds = segments.contains(times)
            candidates.append(_Candidate(str(name), segments, holds))
    picked = _best_of(candidates, taken, removed, budget)
    refused = _reasons(candidates, picked, taken, removed, budget)
    return chosen + [c.name for c in picked], refused


def _best_of(candidates, taken, removed, budget) -> list[_Candidate]:
    greedy = _greedy(candidates, taken, removed, budget)
    alone = [
        (int(np.count_nonzero(c.holds & ~removed)), -i, c)
        for i, c in enumerate(candidates)
        if (taken | c.segments).total_ns <= budget
    ]
    single = max(alone, key=lambda a: a[:2])[2] if alone else None
    if single is None:
        return greedy
    gain = np.count_nonzero(_holds(greedy, removed) & ~removed)
    if np.count_nonzero(single.holds & ~removed) > gain:
        # what still fits beside the single best is taken as well
        rest = [c for c in candidates if c is not single]
        base, gone = taken | single.segments, removed | single.holds
        return [single, *_greedy(rest, base, gone, budget)]
    return greedy


def _holds(chosen, removed) -> np.ndarray:
    out = removed.copy()
    for candidate in chosen:
        out |= candidate.holds
    return out


def _greedy(candidates, taken, removed, budget) -> list[_Candidate]:
    left, chosen = list(candidates), []
    while left:
        best, best_rate = None, 0.0
        for candidate in left:
            gain = np.count_nonzero(candidate.holds & ~removed)
            cost = (taken | candidate.segments).total_ns - taken.total_ns
            if gain == 0 or taken.total_ns + cost > budget:
                continue
            rate = gain / max(cost, 1)
            if rate > best_rate:
                best, best_rate = candidate, rate
        if best is None:
            return chosen
        chosen.append(best)
        left.remove(best)
        taken, removed = taken | best.segments, removed | best.holds
    return chosen


def _reasons(candidates, picked, taken, removed, budget) -> dict[str, str]:
    gone, over = _holds(picked, removed), taken.total_ns - budget
    for candidate in picked:
        taken = taken | candidate.segments
    room = max(budget - taken.total_ns, 0) / NS
    left = f"{room:.3f} s of the budget are left"
    if over > 0:
        left = f"faults alone exceed the budget by {over / NS:.3f} s"
    refused = {}
    for candidate in candidates:
        if candidate in picked:
            continue
        if not np.any(candidate.holds):
            refused[candidate.name] = "adds nothing: it holds no strain transient"
            continue
        if not np.any(candidate.holds & ~gone):
            refused[candidate.name] = (
                "adds nothing: the chosen vetoes remove all its transients"
            )
            continue
        added = ((taken | candidate.segments).total_ns - taken.total_ns) / NS
        refused[candidate.name] = (
            f"does not fit: adds {added:.3f} s of dead time, {left}; raise "
            "vetoes.max_dead_time to allow it"
        )
    return refused
