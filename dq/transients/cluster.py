"""From runs of tiles to transients: clusters of overlapping tiles.

A tile stands for the rectangle of unit area around its centre,

    2 sqrt(pi) sigma_t  by  2 sqrt(pi) sigma_f        (sigma_t sigma_f = 1 / 4 pi),

its noise-equivalent duration and bandwidth. Tiles whose rectangles, stretched by
``LINK``, overlap in time and in frequency belong together: a sweep or a ringing note
near threshold leaves gaps between the tiles that noise has lifted above it. So do
clusters that happen at the same time (their common time is at least half of their
united time), such as the teeth of a comb. What a long low note and a short click share
is less than that, and they stay two transients.
"""

from __future__ import annotations

from dataclasses import dataclass, fields, replace

import numpy as np

#: Half-extents of a tile in its standard deviations.
HALF_EXTENT = np.sqrt(np.pi)

#: Stretch of the rectangles when neighbours are sought. At 1 the beat notes of the
#: invented site fall into 2.6 pieces each, at 2 into 1.8 (measured; their middle lies
#: below the band, so two are honest); noise tiles are seconds apart and do not chain.
LINK = 2.0

#: Pairs compared at a time: bounds memory at 8 bytes x a few columns per pair.
_PAIR_CHUNK = 2_000_000

#: Clusters whose common time reaches this fraction of their united time are one.
SAME_TIME = 0.5


@dataclass(frozen=True)
class Marks:
    """Runs of tiles placed in absolute time, one array element each.

    Attributes
    ----------
    start, end : ndarray of float
        Time extent, s after the stretch's reference time.
    low, high : ndarray of float
        Frequency extent, Hz.
    time : ndarray of float
        Time of the loudest tile, interpolated between its neighbours, s.
    frequency, q : ndarray of float
        Hz and dimensionless, of the loudest tile.
    energy : ndarray of float
        Normalised energy of the loudest tile.
    noise : ndarray of float
        Effective one-sided noise density in that tile, unit^2 per Hz.
    count : ndarray of int
        Tiles in the run.
    plane : ndarray of int
        Plane of the run's row.
    loud : ndarray of bool
        Whether the run's tiles reach the threshold; the others are bright.
    score : ndarray of float
        The run's part of the score of an island of bright tiles.
    summed : ndarray of float
        Energy above noise that was summed over the transient, at one of its marks.
    reach_s, reach_hz : ndarray of float
        How far beyond its extent a mark seeks neighbours.
    """

    start: np.ndarray
    end: np.ndarray
    low: np.ndarray
    high: np.ndarray
    time: np.ndarray
    frequency: np.ndarray
    q: np.ndarray
    energy: np.ndarray
    noise: np.ndarray
    count: np.ndarray
    plane: np.ndarray
    loud: np.ndarray
    score: np.ndarray
    summed: np.ndarray
    reach_s: np.ndarray
    reach_hz: np.ndarray

    def __len__(self) -> int:
        return len(self.start)

    def take(self, index: np.ndarray) -> Marks:
        """Give the marks at an index or mask."""
        return Marks(*(getattr(self, f.name)[index] for f in fields(self)))

    def shift(self, seconds: float) -> Marks:
        """Move all times by ``seconds``."""
        moved = {n: getattr(self, n) + seconds for n in ("start", "end", "time")}
        return replace(self, **moved)

    @staticmethod
    def none() -> Marks:
        """Give no marks."""
        kinds = {"plane": np.int64, "loud": bool}
        return Marks(*(np.zeros(0, kinds.get(f.name, float)) for f in fields(Marks)))

    @staticmethod
    def join(parts: list[Marks]) -> Marks:
        """Put marks one after the other."""
        parts = [p for p in parts if len(p)] or [Marks.none()]
        names = [f.name for f in fields(Marks)]
        return Marks(*(np.concatenate([getattr(p, n) for p in parts]) for n in names))


def _connected(count: int, left: np.ndarray, right: np.ndarray) -> np.ndarray:
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    ones = np.ones(len(left), dtype=np.int8)
    graph = coo_array((ones, (left, right)), shape=(count, count))
    return connected_components(graph, directed=False)[1]


def overlap_pairs(start: np.ndarray, end: np.ndarray):
    """Yield index pairs of intervals that overlap in time, a bounded lot at a time.

    Parameters
    ----------
    start, end : ndarray, shape (n,)
        Intervals sorted by start.

    Yields
    ------
    left, right : ndarray of int
        ``start[right] < end[left]`` and ``left < right``.
    """
    index = np.arange(len(start))
    partners = np.searchsorted(start, end, side="left") - index - 1
    partners = np.maximum(partners, 0)
    cuts = np.cumsum(partners)
    begin = 0
    while begin < len(start):
        done = cuts[begin - 1] if begin else 0
        stop = int(np.searchsorted(cuts, done + _PAIR_CHUNK, side="right"))
        stop = max(stop, begin + 1)
        counts = partners[begin:stop]
        left = np.repeat(index[begin:stop], counts)
        step = np.arange(len(left)) - np.repeat(np.cumsum(counts) - counts, counts)
        yield left, left + 1 + step
        begin = stop


def label_marks(marks: Marks) -> np.ndarray:
    """Give each mark the number of its cluster.

    Parameters
    ----------
    marks : Marks

    Returns
    -------
    ndarray of int, shape (n,)
    """
    if len(marks) == 0:
        return np.zeros(0, dtype=np.int64)
    order = np.argsort(marks.start - marks.reach_s, kind="stable")
    placed = marks.take(order)
    start, end = placed.start - placed.reach_s, placed.end + placed.reach_s
    low, high = placed.low - placed.reach_hz, placed.high + placed.reach_hz
    lefts, rights = [], []
    for left, right in overlap_pairs(start, end):
        touch = (low[left] < high[right]) & (low[right] < high[left])
        lefts.append(left[touch])
        rights.append(right[touch])
    labels = _connected(len(marks), np.concatenate(lefts), np.concatenate(rights))
    labels = _join_simultaneous(placed.start, placed.end, labels)
    back = np.empty(len(order), dtype=np.int64)
    back[order] = labels
    return back


def _join_simultaneous(start, end, labels) -> np.ndarray:
    count = labels.max() + 1
    first = np.full(count, np.inf)
    last = np.full(count, -np.inf)
    np.minimum.at(first, labels, start)
    np.maximum.at(last, labels, end)
    order = np.argsort(first, kind="stable")
    begin, stop = first[order], last[order]
    lefts, rights = [], []
    for left, right in overlap_pairs(begin, stop):
        common = np.minimum(stop[left], stop[right]) - begin[right]
        united = np.maximum(stop[left], stop[right]) - begin[left]
        same = common >= SAME_TIME * united
        lefts.append(left[same])
        rights.append(right[same])
    joined = _connected(count, np.concatenate(lefts), np.concatenate(rights))
    name = np.empty(count, dtype=np.int64)
    name[order] = joined
    return name[labels]


def label_transients(marks: Marks, groups: np.ndarray) -> np.ndarray:
    """Give each mark the number of its transient.

    Bright tiles make no transients of loud ones: what reaches the threshold is
    gathered as if there were no others. The bright marks of a group go to its loudest
    transient, or are one themselves.

    Parameters
    ----------
    marks : Marks
    groups : ndarray of int, shape (n,)
        Of :func:`label_marks`.

    Returns
    -------
    ndarray of int, shape (n,)
    """
    loud = np.flatnonzero(marks.loud)
    if len(loud) in (0, len(marks)):
        return groups
    count = groups.max() + 1
    labels = groups.copy()
    labels[loud] = count + label_marks(marks.take(loud))
    order = loud[np.lexsort((marks.time[loud], marks.energy[loud]))]
    owner = np.arange(count)
    owner[groups[order]] = labels[order]  # the last one stays, the loudest
    faint = ~marks.loud
    labels[faint] = owner[groups[faint]]
    return np.unique(labels, return_inverse=True)[1]


def split_finished(marks: Marks, labels: np.ndarray, until: float):
    """Split marks into those of clusters that end before ``until`` and the rest.

    Returns
    -------
    finished, pending : ndarray of bool, shape (n,)
    """
    if len(marks) == 0:
        return np.zeros(0, dtype=bool), np.zeros(0, dtype=bool)
    last = np.full(labels.max() + 1, -np.inf)
    np.maximum.at(last, labels, marks.end)
    finished = last[labels] < until
    return finished, ~finished


def cluster_scores(
    marks: Marks, labels: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Give each cluster's score, and what its plane of most score is.

    Returns
    -------
    score : ndarray, shape (n_clusters,)
        Summed in each plane; the planes see the same energy, so the best counts.
    plane : ndarray of int, shape (n_clusters,)
        That plane, the loudest tile's where no bright tile was kept.
    loud : ndarray of bool, shape (n_clusters,)
        Whether a tile of the cluster reaches the threshold.
    """
    if len(marks) == 0:
        return np.zeros(0), np.zeros(0, dtype=np.int64), np.zeros(0, dtype=bool)
    count, planes = int(labels.max()) + 1, int(marks.plane.max()) + 1
    cell = labels * planes + marks.plane
    score = np.bincount(cell, marks.score, count * planes).reshape(count, planes)
    loudest = np.zeros(count * planes)
    np.maximum.at(loudest, cell, marks.energy)
    plane = np.where(
        score.max(axis=1) > 0,
        score.argmax(axis=1),
        loudest.reshape(count, planes).argmax(axis=1),
    )
    loud = np.bincount(labels[marks.loud], minlength=count) > 0
    return score.max(axis=1), plane, loud


def summarise(marks: Marks, labels: np.ndarray) -> dict[str, np.ndarray]:
    """Give one row per cluster, in order of peak time.

    Returns
    -------
    dict of ndarray
        ``time, start, end`` in s; ``frequency, low, high`` in Hz; ``q``; ``snr`` =
        sqrt(2 (Z - 1)) of the loudest tile; ``amplitude`` = snr sqrt(noise / 2), the
        root-sum-square amplitude of a narrow-band signal (rho = sqrt(2) h_rss /
        sqrt(S), Sutton 2013); ``count``; ``summed`` = energy above noise summed over
        the cluster, that of the loudest tile where none was summed; ``score``;
        ``loud``. Extents and counts are those of the tiles above threshold, of the
        bright ones of the best plane where there are none.
    """
    columns = ("time", "start", "end", "frequency", "low", "high", "q", "snr")
    columns = (*columns, "amplitude", "count", "summed", "score", "loud")
    if len(marks) == 0:
        return {c: np.zeros(0) for c in columns}
    score, plane, loud = cluster_scores(marks, labels)
    summed = np.bincount(labels, marks.summed)
    own = np.where(loud[labels], marks.loud, marks.plane == plane[labels])
    marks, labels = marks.take(own), labels[own]
    # loudest first inside each cluster; ties go to the earlier, then lower, mark
    order = np.lexsort((marks.frequency, marks.time, -marks.energy, labels))
    ordered = marks.take(order)
    name, first, group = np.unique(
        labels[order], return_index=True, return_inverse=True
    )
    peak = ordered.take(first)
    energy = np.maximum(peak.energy - 1.0, 0.0)
    snr = np.sqrt(2.0 * energy)
    out = {
        "time": peak.time,
        "start": np.minimum.reduceat(ordered.start, first),
        "end": np.maximum.reduceat(ordered.end, first),
        "frequency": peak.frequency,
        "low": np.minimum.reduceat(ordered.low, first),
        "high": np.maximum.reduceat(ordered.high, first),
        "q": peak.q,
        "snr": snr,
        "amplitude": snr * np.sqrt(peak.noise / 2.0),
        "count": np.bincount(group, weights=ordered.count).astype(np.int64),
        "summed": np.where(summed[name] > 0, summed[name], energy),
        "score": score[name],
        "loud": loud[name],
    }
    by_time = np.lexsort((out["frequency"], out["time"]))
    return {key: values[by_time] for key, values in out.items()}
