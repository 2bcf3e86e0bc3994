"""Efficiency on data that the vetoes were not chosen from.

A choice made and measured on the same transients flatters itself: of many settings the
luckiest is taken. So the time is cut into blocks on a fixed GPS grid; witnesses are
selected and vetoes chosen on every other block, and measured on the blocks between, and
the reverse. Each transient is then measured once, by a choice that has not seen it.
Blocks instead of single transients keep bursts on one side (two-fold cross-validation
by blocks; Stone 1974, J. R. Stat. Soc. B 36 111, from memory, for the principle).

The interval is the exact one of a proportion (Clopper & Pearson 1934) for transients
that come alone. Those of one burst are removed together or not at all, so transients
that follow each other closely are one cluster, and the variance between clusters, where
it exceeds the binomial one, lowers the number of trials by their ratio (the design
effect: Kish 1965, Survey Sampling; for this interval Korn & Graubard 1998, Survey
Methodology 24 193; both from memory). Half of the data select fewer weak witnesses than
all of them do, and at times other windows for the same one: what is measured is the way
of choosing, and the row ``all`` errs on the low side of the vetoes in force.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from dq.cost.cost import ALL, union_of
from dq.counting import clopper_pearson
from dq.segments import NS, Segments

if TYPE_CHECKING:
    import pandas as pd


#: Transients that follow each other within this are one cluster, s (own choice: longer
#: than the pieces of one disturbance lie apart). Unrelated ones that are joined as well
#: change nothing but the noise of the variance.
CLUSTER_GAP_S = 3.0


@dataclass(frozen=True)
class Selection:
    """What a choice on part of the time came to.

    Attributes
    ----------
    built : mapping of str to Segments
        Every veto that could be chosen, by name, over all of the analysed time.
    chosen : list of str
        Those that were chosen.
    """

    built: Mapping[str, Segments]
    chosen: list[str]


def alternate_blocks(analysed: Segments, block_s: float) -> tuple[Segments, Segments]:
    """Part analysed time into the even and the odd blocks of a grid from GPS 0.

    Parameters
    ----------
    analysed : Segments
    block_s : float
        Length of a block, s.
    """
    if not analysed:
        return Segments.none(), Segments.none()
    block = max(round(block_s * NS), 1)
    first = int(analysed.starts[0]) // block
    last = -(-int(analysed.ends[-1]) // block)
    even = np.arange(first + first % 2, last, 2, dtype=np.int64) * block
    blocks = Segments(even, even + block)
    return analysed & blocks, analysed - blocks


def held_out(
    select: Callable[[Segments], Selection],
    times: np.ndarray,
    *,
    analysed: Segments,
    block_s: float,
) -> pd.DataFrame:
    """Measure efficiencies on the blocks that a choice has not seen.

    Parameters
    ----------
    select : callable
        Selects witnesses and chooses vetoes on some time, looking at the strain's
        transients within that time alone.
    times : ndarray of int64
        The strain's transients, nanoseconds.
    analysed : Segments
    block_s : float

    Returns
    -------
    pandas.DataFrame
        ``held_out_efficiency``, ``held_out_low``, ``held_out_high``, indexed by veto. A
        veto is measured against the halves whose own data led to it; one that neither
        half leads to has no row. ``all`` is what the choices remove together. Without
        time on both sides the table is empty.
    """
    import pandas as pd

    halves = alternate_blocks(analysed, block_s)
    times = np.sort(times)
    cluster = np.cumsum(np.diff(times, prepend=times[:1]) > CLUSTER_GAP_S * NS)
    counts: dict[str, list[np.ndarray]] = {}
    for here, there in (halves, halves[::-1]) if all(halves) else ():
        selection = select(here)
        seen = there.contains(times)
        outside = times[seen]
        union = union_of(selection.built[n] for n in selection.chosen)
        for name, segments in {**selection.built, ALL: union}.items():
            parts = counts.setdefault(name, [])
            parts.append(np.array([segments.contains(outside), cluster[seen]]))
    rows = {}
    for name, parts in counts.items():
        removed, member = np.concatenate(parts, axis=1)
        if len(removed):
            rows[name] = (removed.mean(), *clustered_interval(removed, member))
    columns = ["held_out_efficiency", "held_out_low", "held_out_high"]
    return pd.DataFrame.from_dict(rows, orient="index", columns=columns, dtype=float)


def clustered_interval(removed: np.ndarray, cluster: np.ndarray) -> tuple[float, float]:
    """Give the 95 % interval of a proportion whose trials come in clusters.

    Parameters
    ----------
    removed : ndarray of bool or int, shape (n,), n > 0
    cluster : ndarray of int, shape (n,)
        Number of each trial's cluster.

    Returns
    -------
    low, high : float
        The exact interval where clusters scatter no more than single trials would.
    """
    trials, count = len(removed), int(np.count_nonzero(removed))
    share = count / trials
    _, index = np.unique(cluster, return_inverse=True)
    sizes = np.bincount(index)
    if count in (0, trials) or len(sizes) < 2 or len(sizes) == trials:
        return clopper_pearson(count, trials)
    rest = np.bincount(index, weights=removed) - share * sizes
    variance = len(sizes) / (len(sizes) - 1) * np.sum(rest**2) / trials**2
    effect = max(variance / (share * (1 - share) / (trials - 1)), 1.0)
    return clopper_pearson(count / effect, trials / effect)
