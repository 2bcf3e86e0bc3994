"""Sums, quantiles, entropies and fits over many small groups at once.

Elements carry the number of their group; every function gives one value per group.
"""

from __future__ import annotations

import numpy as np


def total(group: np.ndarray, values: np.ndarray, count: int) -> np.ndarray:
    """Give the sum of each group, shape (count,)."""
    return np.bincount(group, weights=values, minlength=count)


def ratio(above: np.ndarray, below: np.ndarray, empty: float = 0.0) -> np.ndarray:
    """Divide; ``empty`` where the divisor is not above 0."""
    some = below > 0
    return np.where(some, above / np.where(some, below, 1.0), empty)


def weighted_quantiles(
    group: np.ndarray,
    key: np.ndarray,
    weight: np.ndarray,
    count: int,
    levels: tuple[float, ...],
) -> np.ndarray:
    """Give quantiles of ``key`` under positive weights.

    Parameters
    ----------
    group : ndarray of int, shape (n,)
    key, weight : ndarray, shape (n,)
    count : int
        Groups; each has at least one element.
    levels : tuple of float
        Within 0..1.

    Returns
    -------
    ndarray, shape (count, len(levels))
        The smallest key at which the weight so far reaches the level's share of the
        group's, moved between the neighbours as if each weight were spread around its
        key (so that a coarse grid does not show).

    Examples
    --------
    >>> g, k = np.zeros(3, int), np.array([2.0, 1.0, 3.0])
    >>> weighted_quantiles(g, k, np.ones(3), 1, (0.5,)).tolist()
    [[2.0]]
    """
    order = np.lexsort((key, group))
    g, k, w = group[order], key[order], weight[order]
    sums = total(g, w, count)
    before = np.concatenate([[0.0], np.cumsum(sums)[:-1]])
    # the middle of each weight, as a share of its group's, counted on by whole groups
    middle = (np.cumsum(w) - 0.5 * w - before[g]) / sums[g]
    place = g + np.clip(middle, 0.0, 1.0 - 1e-9)
    first = np.searchsorted(g, np.arange(count), side="left")
    last = np.searchsorted(g, np.arange(count), side="right") - 1
    out = np.empty((count, len(levels)))
    for j, level in enumerate(levels):
        right = np.searchsorted(place, np.arange(count) + level, side="left")
        right = np.clip(right, first, last)
        left = np.clip(right - 1, first, last)
        width = place[right] - place[left]
        share = ratio(np.arange(count) + level - place[left], width, 1.0)
        out[:, j] = k[left] + np.clip(share, 0.0, 1.0) * (k[right] - k[left])
    return out


def moments(group, key, weight, count):
    """Give mean, standard deviation, skewness and kurtosis (0 for a Gaussian)."""
    sums = total(group, weight, count)
    mean = total(group, weight * key, count) / sums
    offset = key - mean[group]
    second = total(group, weight * offset**2, count) / sums
    third = total(group, weight * offset**3, count) / sums
    fourth = total(group, weight * offset**4, count) / sums
    skewness = ratio(third, second**1.5)
    kurtosis = ratio(fourth, second**2, 3.0) - 3.0
    return mean, np.sqrt(second), skewness, kurtosis


def entropy(shares: np.ndarray) -> np.ndarray:
    """Give the Shannon entropy of each row's shares over that of equal ones.

    Parameters
    ----------
    shares : ndarray, shape (count, n_bins)
        Not negative.

    Examples
    --------
    >>> entropy(np.array([[1.0, 1.0], [1.0, 0.0]])).tolist()
    [1.0, 0.0]
    """
    p = ratio(shares, shares.sum(axis=1, keepdims=True))
    logs = np.log(np.where(p > 0, p, 1.0))
    return -(p * logs).sum(axis=1) / np.log(shares.shape[1]) + 0.0


def line_fit(group, x, y, weight, count):
    """Fit a straight line to each group by weighted least squares.

    Returns
    -------
    slope, correlation : ndarray, shape (count,)
        0 where a group has no spread in x or in y.
    """
    sums = np.maximum(total(group, weight, count), 1e-300)
    dx = x - (total(group, weight * x, count) / sums)[group]
    dy = y - (total(group, weight * y, count) / sums)[group]
    xx = total(group, weight * dx * dx, count)
    yy = total(group, weight * dy * dy, count)
    xy = total(group, weight * dx * dy, count)
    return ratio(xy, xx), np.clip(ratio(xy, np.sqrt(xx * yy)), -1.0, 1.0)


def parabola_fit(group, x, y, weight, count):
    """Fit a parabola y = a + b x + c x^2 to each group by weighted least squares.

    Parameters
    ----------
    x : ndarray
        Of order 1 around 0, so that the sums are well conditioned.

    Returns
    -------
    slope, bend, explained : ndarray, shape (count,)
        b, c and the share of the variance of y that the parabola explains.
    """
    sums = np.maximum(total(group, weight, count), 1e-300)
    s = [total(group, weight * x**k, count) / sums for k in range(1, 5)]
    mean = total(group, weight * y, count) / sums
    dy = y - mean[group]
    r = [total(group, weight * dy * x**k, count) / sums for k in (1, 2)]
    # normal equations after the mean is taken out, with a little ridge for lone tiles
    a, b, c = s[1] - s[0] ** 2, s[2] - s[0] * s[1], s[3] - s[1] ** 2
    a, c = a + 1e-9, c + 1e-9
    det = a * c - b * b
    slope, bend = (c * r[0] - b * r[1]) / det, (a * r[1] - b * r[0]) / det
    variance = total(group, weight * dy * dy, count) / sums
    explained = ratio(slope * r[0] + bend * r[1], variance)
    return slope, bend, np.clip(explained, 0.0, 1.0)
