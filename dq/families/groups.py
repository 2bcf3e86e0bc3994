"""Blocks of time that never stand on both sides of a split."""

from __future__ import annotations

import numpy as np

#: Default length of a block: longer than the epochs in which one disturbance repeats
#: (own choice).
BLOCK_S = 64.0


def time_groups(times_s: np.ndarray, block_s: float = BLOCK_S) -> np.ndarray:
    """Count off the blocks of time that examples lie in.

    Parameters
    ----------
    times_s : ndarray, shape (n,)
        GPS seconds.
    block_s : float
        Seconds; blocks start at GPS multiples of it.

    Returns
    -------
    ndarray of int64, shape (n,)

    Raises
    ------
    ValueError
        The block is not positive or a time is not finite.

    Examples
    --------
    >>> time_groups([0.0, 63.9, 64.0, 200.0]).tolist()
    [0, 0, 1, 3]
    """
    times = np.asarray(times_s, float)
    if not block_s > 0:
        raise ValueError(f"block_s={block_s} must be positive")
    if not np.all(np.isfinite(times)):
        raise ValueError("every time must be a finite GPS second")
    return np.floor(times / block_s).astype(np.int64)


def group_folds(
    y: np.ndarray, groups: np.ndarray, *, folds: int, rng: np.random.Generator
) -> np.ndarray:
    """Deal whole groups into folds that share every family evenly.

    Parameters
    ----------
    y : ndarray of int, shape (n,)
        Family of each example, 0..families-1.
    groups : ndarray, shape (n,)
    folds : int
    rng : numpy.random.Generator

    Returns
    -------
    ndarray of int, shape (n,)

    Notes
    -----
    Groups are dealt from the one that holds the largest share of any family to the
    smallest, each to the fold that holds least of its families; equal ones in random
    order.
    """
    _, place = np.unique(groups, return_inverse=True)
    count = int(place.max()) + 1
    share = np.zeros((count, int(y.max()) + 1))
    np.add.at(share, (place, y), 1.0)
    share /= np.maximum(share.sum(axis=0), 1.0)
    tie = rng.permutation(count)
    order = np.lexsort((tie, -share.max(axis=1).round(12)))
    load = np.zeros((folds, share.shape[1]))
    members = np.zeros(folds)
    dealt = np.empty(count, dtype=np.int64)
    for group in order:
        fold = int(np.lexsort((members, (load @ share[group]).round(12)))[0])
        dealt[group] = fold
        load[fold] += share[group]
        members[fold] += share[group].sum()
    return dealt[place]
