"""Which vetoes to apply under a dead-time budget.

Faults come first: their data cannot be used whatever the budget says, and where they
alone exceed it nothing else is taken. The others are taken greedily by worth removed
per second of dead time added, as long as they fit (``greedy``); the best single veto
that fits, with what fits beside it, wins if it removes more (Khuller, Moss & Naor 1999,
Inf. Proc. Lett. 70 39): greed alone falls into the trap of a cheap small gain that
shuts out a large one. The next best single ones are tried in the same way. For costs
that add up, the better of the two rules removes at least 0.405 of the optimum (Tang et
al. 2021; the larger constant of the 1999 paper rests on a proof with a gap). Here dead
time is that of the union, so vetoes that share time pay once: that leaves the answer
within the budget, but outside the theorem, and so the instance's own bound is worked
out beside it (``dq.vetoes.bound``).

Ties go to the veto that stands earlier in the table. Sums are of whole numbers, so the
answer does not depend on the order of adding.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from fractions import Fraction
from typing import TYPE_CHECKING

import numpy as np

from dq.segments import NS, Segments, to_ns_array
from dq.tables import VETO_CURVE, conform
from dq.vetoes.bound import gain_bounds
from dq.vetoes.cover import Cover

if TYPE_CHECKING:
    import pandas as pd

#: Worth is counted in thousandths, so that sums of weights are exact.
WORTH_UNIT = 1000

#: So many of the best single vetoes are each tried as the first one, greed following
#: (a step towards the enumeration of Sviridenko 2004, Oper. Res. Lett. 32 41).
FIRSTS = 12

#: Family of possible signals: removing one is no gain.
_SIGNALS = "chirp_like"


@dataclass(frozen=True, eq=False)
class Choice:
    """What was chosen, and how far from the best it can be.

    Attributes
    ----------
    chosen : list of str
        Names in the order chosen.
    refused : dict of str to str
        The others, with the reason.
    gain, bound : float
        Fraction of the transients' worth that the choice removes, and that no choice
        within the budget exceeds; faults included. NaN without transients.
    curve : pandas.DataFrame
        ``dq.tables.VETO_CURVE``.
    """

    chosen: list[str]
    refused: dict[str, str]
    gain: float
    bound: float
    curve: pd.DataFrame


def choose_vetoes(
    vetoes: pd.DataFrame,
    strain: pd.DataFrame,
    *,
    analysed: Segments,
    max_dead_time: float,
    weights: str = "count",
    family_weights: Mapping[str, float] | None = None,
) -> Choice:
    """Choose vetoes within the budget.

    Parameters
    ----------
    vetoes : pandas.DataFrame
        ``dq.tables.VETOES``.
    strain : pandas.DataFrame
        ``dq.tables.TRANSIENTS``, with ``family`` where families are weighed.
    analysed : Segments
    max_dead_time : float
        Fraction of the analysed time.
    weights : {"count", "snr"}
        What a removed transient is worth: 1, or its SNR.
    family_weights : mapping of str to float, optional
        Factors by family; families not named count 1, ``chirp_like`` always 0.

    Returns
    -------
    Choice
    """
    times = to_ns_array(strain["gps_time"].to_numpy(float))
    judged = analysed.contains(times)
    worth = transient_worth(strain, weights, family_weights or {})[judged]
    order = np.argsort(times[judged], kind="stable")
    times, worth = times[judged][order], worth[order]
    # as written in decimals: 0.1 of 1000 s is 100 s, not a nanosecond less
    budget = int(Fraction(str(max_dead_time)) * analysed.total_ns)
    base, faults, names, segments = _sort_out(vetoes, analysed)
    cover = Cover(segments, base, times, worth)
    room = budget - base.total_ns
    start = cover.state()
    picked = _best_of(cover, room)
    reasons = _reasons(cover, names, picked, room)
    removed = int(start[1].sum() - cover.left.sum())
    cover.restore(start)
    path = greedy(cover, None)
    cover.restore(start)
    dead = _path_costs(cover, path)
    cover.restore(start)
    fits = cover.costs() <= max(room, 0)
    budgets = np.append(dead, max(room, 0))
    bounds = gain_bounds(cover, path, budgets, fits)
    total, held = int(worth.sum()), int(worth.sum() - start[1].sum())
    rows = _Path(cover, names, path, dead, bounds[:-1], held, total)
    chosen = faults + [names[i] for i in picked]
    return Choice(
        chosen=chosen,
        refused=reasons,
        gain=_share(held + removed, total),
        bound=_share(held + max(bounds[-1], removed), total),
        curve=_curve(rows, base, times, analysed, chosen),
    )


def transient_worth(
    strain: pd.DataFrame, weights: str, family_weights: Mapping[str, float]
) -> np.ndarray:
    """Give what removing each transient is worth, in units of 1 / ``WORTH_UNIT``."""
    worth = np.ones(len(strain))
    if weights == "snr":
        worth = strain["snr"].to_numpy(float)
    if "family" in strain:
        factor = {**family_weights, _SIGNALS: 0.0}
        family = strain["family"].fillna("").astype(str)
        worth = worth * np.array([factor.get(f, 1.0) for f in family])
    return np.rint(worth * WORTH_UNIT).astype(np.int64)


def _sort_out(vetoes: pd.DataFrame, analysed: Segments):
    """Part faults from candidates: union and names of those, names and segments."""
    base, faults, names, segments = Segments.none(), [], [], []
    for name, rows in vetoes.groupby("veto", sort=False):
        time = analysed & Segments.from_arrays(
            rows["gps_start"].to_numpy(np.int64), rows["gps_end"].to_numpy(np.int64)
        )
        if rows["source"].iloc[0] == "fault":
            faults.append(str(name))
            base = base | time
        else:
            names.append(str(name))
            segments.append(time)
    return base, faults, names, segments


def greedy(cover: Cover, room: int | None, first: int | None = None) -> list[int]:
    """Take candidates by worth per dead time until nothing fits or adds.

    Parameters
    ----------
    cover : Cover
        Is left in the state after the choice.
    room : int or None
        Dead time that may be added, nanoseconds; None: any.
    first : int, optional
        Taken before all others.

    Returns
    -------
    list of int
        Candidates in order.

    Notes
    -----
    Lazy evaluation (Minoux 1978, Optimization Techniques, Springer): a gain from an
    earlier step can only have shrunk, so it bounds today's and is worked out anew only
    where that bound leads. Costs of a union shrink as well, which would raise a rate;
    they are worked out anew for all candidates at each step.
    """
    chosen: list[int] = []
    gains = cover.gains()
    alive = gains > 0
    while True:
        costs = cover.costs()
        if room is not None:
            # what does not fit now never will: room shrinks at least as fast
            alive &= costs <= room
        if first is not None and not chosen:
            best = first
        else:
            best = _leading(cover, gains, costs, alive)
        if best is None:
            return chosen
        chosen.append(best)
        alive[best] = False
        cover.take(best)
        if room is not None:
            room -= int(costs[best])


def _leading(cover: Cover, gains, costs, alive) -> int | None:
    """Give the candidate of the best rate; corrects the gains that it looks at."""
    fresh = np.zeros(len(gains), dtype=bool)
    rates = np.where(alive, gains / np.maximum(costs, 1), -1.0)
    while len(rates):
        # argmax gives the first of equal ones: ties go to the earlier veto
        best = int(np.argmax(rates))
        if rates[best] <= 0:
            return None
        if fresh[best]:
            return best
        gains[best] = cover.gain(best)
        fresh[best] = True
        rates[best] = gains[best] / max(costs[best], 1)
    return None


def _best_of(cover: Cover, room: int) -> list[int]:
    """Choose within the room; leaves the cover in the state after the choice."""
    start = cover.state()
    if room < 0 or cover.count == 0:
        return []
    alone = np.where(cover.costs() <= room, cover.gains(), 0)
    picked, removed = _removed(cover, start, room, None)
    for first in np.argsort(-alone, kind="stable")[:FIRSTS]:
        if alone[first] > 0 and first not in picked[:1]:
            # what still fits beside it is taken as well
            other, more = _removed(cover, start, room, int(first))
            if more > removed:
                picked, removed = other, more
    cover.restore(start)
    for candidate in picked:
        cover.take(candidate)
    return picked


def _removed(cover: Cover, start, room: int, first: int | None):
    cover.restore(start)
    picked = greedy(cover, room, first)
    return picked, int(start[1].sum() - cover.left.sum())


def _reasons(cover: Cover, names, picked, room: int) -> dict[str, str]:
    """Say why the others were not taken; the cover is that after the choice."""
    costs, gains = cover.costs(), cover.gains()
    spent = int(np.sum(cover.start_open - cover.open_ns))
    left = f"{max(room - spent, 0) / NS:.3f} s of the budget are left"
    if room < 0:
        left = f"faults alone exceed the budget by {-room / NS:.3f} s"
    refused = {}
    for i, name in enumerate(names):
        if i in picked:
            continue
        if len(cover.holds(i)) == 0:
            refused[name] = "adds nothing: it holds no strain transient"
        elif gains[i] == 0:
            refused[name] = "adds nothing: the chosen vetoes remove all its transients"
        else:
            refused[name] = (
                f"does not fit: adds {costs[i] / NS:.3f} s of dead time, {left}; raise "
                "vetoes.max_dead_time to allow it"
            )
    return refused


def _path_costs(cover: Cover, path: list[int]) -> np.ndarray:
    """Give the dead time of the union after each step, beyond the faults'."""
    dead = [0]
    for candidate in path:
        dead.append(dead[-1] + int(cover.costs()[candidate]))
        cover.take(candidate)
    return np.array(dead, dtype=np.int64)


@dataclass(frozen=True, eq=False)
class _Path:
    cover: Cover
    names: list[str]
    path: list[int]
    dead: np.ndarray
    bounds: np.ndarray
    held: int
    total: int


def _curve(rows: _Path, base: Segments, times, analysed, chosen) -> pd.DataFrame:
    import pandas as pd

    gone = base.contains(times)
    lines = []
    worth = rows.held
    for step, name in enumerate(["", *(rows.names[i] for i in rows.path)]):
        if step:
            candidate = rows.path[step - 1]
            worth += rows.cover.gain(candidate)
            rows.cover.take(candidate)
            gone[rows.cover.holds(candidate)] = True
        dead_ns = base.total_ns + int(rows.dead[step])
        gain = _share(worth, rows.total)
        bound = _share(rows.held + rows.bounds[step], rows.total)
        removed = int(np.count_nonzero(gone))
        lines.append(
            {
                "step": step,
                "veto": name,
                "dead_time_s": dead_ns / NS,
                "dead_time_fraction": _share(dead_ns, analysed.total_ns),
                "removed": removed,
                "efficiency": _share(removed, len(times)),
                "gain": gain,
                "bound": max(gain, bound),
                "chosen": name in chosen or not step,
            }
        )
    return conform(pd.DataFrame(lines), VETO_CURVE)


def _share(part, whole) -> float:
    return float(part / whole) if whole else float("nan")
