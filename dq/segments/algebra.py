"""Exact algebra of half-open segments on arrays of integer nanoseconds.

Definitions. A segment ``[start, end)`` holds the times ``start <= t < end``. A segment
whose end equals its start holds nothing and is dropped. Two segments overlap when they
share a time, and abut when one ends where the other starts; abutting segments fuse:
``[a, b)`` and ``[b, c)`` become ``[a, c)``. A *normal* list is sorted, disjoint,
non-abutting and without empty segments; every function below takes and gives normal
lists as a pair of int64 arrays, except ``normalise``, which makes them.

A float64 near 1.5e9 s steps by 2.4e-7 s, so seconds as floats cannot say which sample
is the last one; integers can.
"""

from __future__ import annotations

import numpy as np

from dq.errors import SegmentError

Pair = tuple[np.ndarray, np.ndarray]


def normalise(starts, ends) -> Pair:
    """Sort, drop the empty and fuse the overlapping and the abutting.

    Parameters
    ----------
    starts, ends : array_like of int, shape (n,)
        Nanoseconds.

    Returns
    -------
    starts, ends : ndarray of int64, shape (m,)

    Raises
    ------
    SegmentError
        A segment ends before it starts, or the arrays differ in length.
    """
    starts = np.atleast_1d(np.asarray(starts, dtype=np.int64))
    ends = np.atleast_1d(np.asarray(ends, dtype=np.int64))
    if starts.shape != ends.shape or starts.ndim != 1:
        raise SegmentError(
            f"segments need as many starts as ends, got {starts.size} and {ends.size}"
        )
    wrong = np.flatnonzero(ends < starts)
    if len(wrong):
        i = wrong[0]
        raise SegmentError(
            f"segment {i} ends at {ends[i]} ns, before its start {starts[i]} ns; swap "
            "or remove it"
        )
    full = ends > starts
    starts, ends = starts[full], ends[full]
    if len(starts) == 0:
        return starts, ends
    order = np.argsort(starts, kind="stable")
    starts, reach = starts[order], np.maximum.accumulate(ends[order])
    opens = np.append(True, starts[1:] > reach[:-1])
    return starts[opens], reach[np.append(opens[1:], True)]


def union(a: Pair, b: Pair) -> Pair:
    """Give the times in ``a`` or in ``b``."""
    return normalise(np.concatenate([a[0], b[0]]), np.concatenate([a[1], b[1]]))


def intersect(a: Pair, b: Pair) -> Pair:
    """Give the times in both: a sweep over the merged borders, without a loop."""
    return _at_depth(a, b, 2)


def subtract(a: Pair, b: Pair) -> Pair:
    """Give the times in ``a`` that are not in ``b``."""
    if len(a[0]) == 0:
        return a
    return intersect(a, complement(b, a[0][0], a[1][-1]))


def complement(a: Pair, start: int, end: int) -> Pair:
    """Give the times of ``[start, end)`` that are not in ``a``."""
    inner = intersect(a, normalise([start], [max(start, end)]))
    starts = np.append(np.int64(start), inner[1])
    ends = np.append(inner[0], np.int64(max(start, end)))
    return normalise(starts, ends)


def _at_depth(a: Pair, b: Pair, depth: int) -> Pair:
    times = np.concatenate([a[0], b[0], a[1], b[1]])
    step = np.ones(len(times), dtype=np.int64)
    step[len(a[0]) + len(b[0]) :] = -1
    # at equal times an end comes before a start: half-open segments do not touch
    order = np.lexsort((step, times))
    times, covered = times[order], np.cumsum(step[order]) >= depth
    edges = np.flatnonzero(np.diff(covered, prepend=False))
    return normalise(times[edges[::2]], times[edges[1::2]])


def index_of(a: Pair, times) -> np.ndarray:
    """Give the number of the segment that holds each time, -1 where none does."""
    times = np.asarray(times, dtype=np.int64)
    index = np.searchsorted(a[0], times, side="right") - 1
    if len(a[0]) == 0:
        return index
    inside = (index >= 0) & (times < a[1][np.maximum(index, 0)])
    return np.where(inside, index, -1)


def contains(a: Pair, times) -> np.ndarray:
    """Say for each time whether a segment holds it."""
    return index_of(a, times) >= 0


def pad(a: Pair, before: int, after: int) -> Pair:
    """Move starts earlier and ends later; negative values shrink, vanished ones go."""
    starts, ends = a[0] - before, a[1] + after
    keep = ends > starts
    return normalise(starts[keep], ends[keep])


def total(a: Pair) -> int:
    """Give the summed length in nanoseconds."""
    return int(np.sum(a[1] - a[0]))
