"""What chance alone does: clusters of transients, their expectation, circular shifts.

Transients come in bursts, and a burst that falls into one window counts many times, so
the number of coincidences of two channels that have nothing to do with each other is
wider than Poisson's law. Three steps bring it back:

1. Strain transients that follow each other much closer than on average are one
   *cluster*, and a cluster counts once however many of its transients coincide.
2. A cluster meets the windows by chance more often than a single transient does. With
   windows W of total length D and gaps between them, shifted around a circle of length
   T, a cluster with inner spacings s_1, s_2, ... meets them with a chance of at most
   (D + sum_j g(s_j)) / T, where g(s) = min(sum_windows min(length, s), sum_gaps
   min(length, s)) bounds what the windows cover anew when moved by s. For a cluster of
   one it is D / T: chance efficiency = dead time.
3. What clustering is left (swells of the rate, rhythms) shows when the strain is
   shifted around the jointly analysed time: the ratio of variance to mean of the
   shifted counts, never taken below 1, divides count and expectation (quasi-Poisson,
   common practice in counting statistics), and no chance is called smaller than the
   share of shifts that reach the measured count, where any does.
"""

from __future__ import annotations

import numpy as np

from dq.counting import poisson_significance
from dq.segments import NS
from dq.witnesses.windows import hits

#: Spacings below this share of the mean spacing of clusters join two transients. An
#: own choice: of unrelated transients it joins one in ten, of bursts nearly all.
JOINED_SHARE = 0.1

#: Longest spacing inside a cluster, s (own choice: bursts of a detector last seconds).
LONGEST_SPACING_S = 10.0

#: Circular shifts of a calibration; 400 give a dispersion to 7 %.
SHIFTS = 400

#: Shifts keep at least this far from no shift, s (own choice: beyond most windows).
LEAST_SHIFT_S = 10.0

#: The golden ratio's fraction spreads shifts evenly and matches no period.
_GOLDEN = 0.6180339887498949


def cluster_starts(positions: np.ndarray, total: int) -> np.ndarray:
    """Give the number of the first transient of each cluster.

    Parameters
    ----------
    positions : ndarray of int64, sorted
        Transients on the fused time line, nanoseconds.
    total : int
        Length of the line, nanoseconds.

    Returns
    -------
    ndarray of int
        Empty without transients.
    """
    if len(positions) == 0:
        return np.array([], dtype=np.intp)
    spacing = np.diff(positions)
    count, starts = 0, np.arange(len(positions))
    # the mean spacing of clusters grows as bursts join, so it settles in a few rounds
    while count != len(starts):
        count = len(starts)
        joined = min(JOINED_SHARE * total / count, LONGEST_SPACING_S * NS)
        starts = np.append(0, np.flatnonzero(spacing > joined) + 1)
    return starts


def inner_spacings(positions: np.ndarray, first: np.ndarray) -> np.ndarray:
    """Give the spacings inside clusters whose first members are ``first``."""
    inside = np.ones(len(positions), dtype=bool)
    inside[first] = False
    return np.diff(positions, prepend=positions[:1])[inside]


def clusters_expected(
    clusters: int,
    spacings: np.ndarray,
    starts: np.ndarray,
    ends: np.ndarray,
    total: int,
) -> float:
    """Give an upper bound of the mean number of clusters that meet windows by chance.

    Parameters
    ----------
    clusters : int
    spacings : ndarray of int64
        Spacings inside the clusters, nanoseconds.
    starts, ends : ndarray of int64
        Windows on the fused time line, sorted and disjoint.
    total : int
        Length of the line.

    Returns
    -------
    float
        Equal to the mean for clusters of one; derivation in the module docstring.
    """
    lengths = ends - starts
    covered = clusters * float(lengths.sum())
    if len(spacings):
        between = np.append(starts[1:], starts[0] + total) - ends
        anew = np.minimum(
            _sum_of_minima(lengths, spacings), _sum_of_minima(between, spacings)
        )
        covered += float(anew.sum())
    return min(covered / total, float(clusters))


def _sum_of_minima(lengths: np.ndarray, bounds: np.ndarray) -> np.ndarray:
    """Give sum_i min(lengths_i, b) for each b."""
    lengths = np.sort(lengths)
    below = np.append(0.0, np.cumsum(lengths, dtype=float))
    shorter = np.searchsorted(lengths, bounds)
    return below[shorter] + (len(lengths) - shorter) * bounds.astype(float)


def shifted_counts(
    positions: np.ndarray,
    first: np.ndarray,
    starts: np.ndarray,
    ends: np.ndarray,
    total: int,
) -> np.ndarray:
    """Count the clusters that meet the windows, for each of many circular shifts.

    Parameters
    ----------
    positions : ndarray of int64, shape (n,), n > 0
        Transients on the fused time line, nanoseconds.
    first : ndarray of int
        Number of the first transient of each cluster.
    starts, ends : ndarray of int64
        Windows on the line.
    total : int
        Length of the line.

    Returns
    -------
    ndarray of int
        The same for the same input: the shifts are fixed multiples of the golden ratio.
    """
    shifts = (np.arange(1, SHIFTS + 1) * _GOLDEN % 1.0 * total).astype(np.int64)
    least = min(round(LEAST_SHIFT_S * NS), total // 4)
    shifts = shifts[(shifts >= least) & (shifts <= total - least)]
    counts = np.zeros(len(shifts), dtype=np.int64)
    # rows of bounded size: a million shifted transients at a time
    step = max(1_000_000 // len(positions), 1)
    for k in range(0, len(shifts), step):
        moved = (positions[None, :] + shifts[k : k + step, None]) % total
        met = np.logical_or.reduceat(hits(moved, starts, ends) >= 0, first, axis=1)
        counts[k : k + step] = met.sum(axis=1)
    return counts


def dispersion(counts: np.ndarray) -> float:
    """Give variance over mean, at least 1."""
    mean = counts.mean() if len(counts) else 0.0
    return max(float(counts.var() / mean), 1.0) if mean > 0.0 else 1.0


def own_measure(scores: np.ndarray, tests: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Measure scores in what the same channel reaches in its other slides.

    The highest score of all channels over many slides is the bar that a witness must
    pass. One channel that shares a rhythm with the strain scores as high in the slides
    that match as without a slide, and would hide all others behind its bar. So each
    score is divided by the highest one that the channel reaches otherwise over what so
    many tests reach by chance, where that is above 1.

    Parameters
    ----------
    scores : ndarray, shape (n_channels, 1 + n_slides, n_targets)
        Highest score of each channel for each target; the first one without a slide.
    tests : ndarray of int, shape (n_channels,)
        Combinations tested for each channel and target.

    Returns
    -------
    measured : ndarray, shape as ``scores``
    divisor : ndarray, shape (n_channels, n_targets)
        Of the scores without a slide; at least 1.

    Notes
    -----
    The score without a slide and those in slides are treated alike, whichever is which.
    Where chance alone is at work they are exchangeable, and so are the measured ones:
    the highest of K + 1 is the first one with a chance of 1 / (K + 1), as before
    (Westfall & Young 1993, Resampling-Based Multiple Testing; from memory).
    """
    top = np.partition(scores, -2, axis=1)[:, -2:, :]
    second, first = top[:, :1, :], top[:, 1:, :]
    otherwise = np.where(scores < first, first, second)
    trials = np.maximum(tests, 1) * scores.shape[1]
    # chance alone scores above this in one channel of ten at most
    usual = np.log10(trials)[:, None, None] + 1.0
    divisor = np.maximum(otherwise / usual, 1.0)
    return scores / divisor, divisor[:, 0, :]


def calibrated_significance(
    count: int, expected: float, shifted: np.ndarray
) -> tuple[float, float]:
    """Give a significance that the shifted counts do not contradict.

    Parameters
    ----------
    count : int
        Clusters that met the windows.
    expected : float
        By chance.
    shifted : ndarray of int
        The same count under circular shifts.

    Returns
    -------
    significance, dispersion : float
    """
    wide = dispersion(shifted)
    significance = float(poisson_significance(count / wide, expected / wide))
    reached = int(np.count_nonzero(shifted >= count))
    if reached:
        share = (1 + reached) / (1 + len(shifted))
        significance = min(significance, float(-np.log10(share)))
    return significance, wide
