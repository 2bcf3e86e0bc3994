"""Class-conditional split-conformal sets.

A set holds every family that the example cannot be told from at the level alpha: the
family's own examples, scored by models that had not seen them, set the bar.
"""

from __future__ import annotations

import numpy as np


def conformal_rank(count: int, alpha: float) -> int:
    """Give the rank k = ceil((n + 1)(1 - alpha)) of the bar among n scores.

    A rank beyond n means that no finite bar keeps the promise.

    Notes
    -----
    Vovk, Gammerman & Shafer 2005; Lei et al. 2018, J. Am. Stat. Assoc. 113 1094. With
    continuous scores the coverage given the calibration set is Beta(k, n + 1 - k).

    Examples
    --------
    >>> [conformal_rank(n, 0.1) for n in (8, 9, 100, 500, 1000)]
    [9, 9, 91, 451, 901]
    """
    # the product of decimals must not step over a whole number by rounding
    return int(np.ceil(round((count + 1) * (1.0 - alpha), 9)))


def conformal_bar(scores: np.ndarray, alpha: float) -> float:
    """Give the k-th smallest score; infinite where too few examples are known."""
    rank = conformal_rank(len(scores), alpha)
    if rank > len(scores):
        return float("inf")
    return float(np.sort(scores)[rank - 1])


def family_bars(scores: np.ndarray, truth: np.ndarray, alpha: float) -> np.ndarray:
    """Give each family's bar from its own examples.

    Parameters
    ----------
    scores : ndarray, shape (n, families)
        Strangeness of each example as a member of each family, out of fold.
    truth : ndarray of int, shape (n,)
        Each example's column.
    alpha : float
        Fraction of a family's members that its sets may miss.

    Returns
    -------
    ndarray, shape (families,)
    """
    return np.array(
        [
            conformal_bar(scores[truth == family, family], alpha)
            for family in range(scores.shape[1])
        ]
    )


def sets_below(scores: np.ndarray, bars: np.ndarray) -> np.ndarray:
    """Give which families each set holds: bool, shape (n, families)."""
    return scores <= bars[None, :]
