"""How good probabilities and sets are: proper scores, calibration, coverage."""

from __future__ import annotations

import numpy as np
import pandas as pd

from dq.counting import clopper_pearson

#: Equal-width bins of the reliability diagram (Naeini et al. 2015 use 10).
BINS = 10


def one_hot(y: np.ndarray, families: np.ndarray) -> np.ndarray:
    """Give 1 where a row's family is the column's, shape (n, families)."""
    return (np.asarray(y)[:, None] == np.asarray(families)[None, :]).astype(float)


def brier(probability: np.ndarray, truth: np.ndarray) -> float:
    """Give the Brier score.

    Parameters
    ----------
    probability : ndarray, shape (n,) or (n, families)
        Binary probabilities, or one row of probabilities per example.
    truth : ndarray, the same shape
        0 or 1.

    Notes
    -----
    Mean squared error; for several families summed over them (Brier 1950, Mon.
    Weather Rev. 78 1), so it lies in 0..2.

    Examples
    --------
    >>> round(brier(np.array([0.9, 0.8, 0.3, 0.1]), np.array([1, 1, 0, 0])), 6)
    0.0375
    """
    squares = (np.asarray(probability, float) - np.asarray(truth, float)) ** 2
    return float(squares.sum() / len(squares))


def log_loss(probability: np.ndarray, truth: np.ndarray) -> float:
    """Give the mean of -ln of the true family's probability (nats)."""
    p = (np.asarray(probability, float) * truth).sum(axis=1)
    return float(-np.log(np.maximum(p, np.finfo(float).tiny)).mean())


def reliability(
    confidence: np.ndarray, right: np.ndarray, bins: int = BINS
) -> pd.DataFrame:
    """Compare stated confidence with how often it was right, bin by bin.

    Parameters
    ----------
    confidence : ndarray, shape (n,)
        Probability of the chosen family, 0..1.
    right : ndarray of bool, shape (n,)
    bins : int

    Returns
    -------
    pandas.DataFrame
        One row per bin that holds examples: ``low, high, count, right, confidence,
        accuracy, accuracy_low, accuracy_high`` (exact 95 % interval).
    """
    confidence, right = np.asarray(confidence, float), np.asarray(right, bool)
    place = np.clip((confidence * bins).astype(int), 0, bins - 1)
    rows = []
    for b in np.unique(place):
        inside = place == b
        count, hits = int(inside.sum()), int(right[inside].sum())
        low, high = clopper_pearson(hits, count)
        rows.append(
            {
                "low": b / bins,
                "high": (b + 1) / bins,
                "count": count,
                "right": hits,
                "confidence": float(confidence[inside].mean()),
                "accuracy": hits / count,
                "accuracy_low": low,
                "accuracy_high": high,
            }
        )
    return pd.DataFrame(rows)


def calibration_error(
    confidence: np.ndarray, right: np.ndarray, bins: int = BINS
) -> float:
    """Give the expected calibration error, sum of (n_b / N) |accuracy - confidence|.

    Notes
    -----
    Naeini, Cooper & Hauskrecht 2015, AAAI, 2901.

    Examples
    --------
    >>> confidence = np.repeat([0.9, 0.6], 10)
    >>> right = np.r_[np.arange(10) < 8, np.arange(10) < 6]
    >>> round(calibration_error(confidence, right), 6)
    0.05
    """
    if len(confidence) == 0:
        return float("nan")
    table = reliability(confidence, right, bins)
    gap = (table["accuracy"] - table["confidence"]).abs()
    return float((table["count"] * gap).sum() / table["count"].sum())


def kappa(counts: np.ndarray, weights: np.ndarray | None = None) -> float:
    """Give Cohen's kappa of two labellers.

    Parameters
    ----------
    counts : ndarray, shape (families, families)
        Rows the first labeller's family, columns the second's.
    weights : ndarray, optional
        Disagreement weights, 0 on the diagonal; by default 1 elsewhere.

    Returns
    -------
    float
        1 full agreement, 0 that of chance; NaN where chance alone would agree always.

    Notes
    -----
    1 - sum(w observed) / sum(w expected) (Cohen 1960, Educ. Psychol. Meas. 20 37;
    weighted Cohen 1968, Psychol. Bull. 70 213).

    Examples
    --------
    >>> round(kappa(np.array([[88, 14, 18], [10, 40, 10], [2, 6, 12]])), 6)
    0.491525
    """
    counts = np.asarray(counts, float)
    total = counts.sum()
    if weights is None:
        weights = 1.0 - np.eye(len(counts))
    expected = (
        np.outer(counts.sum(axis=1), counts.sum(axis=0)) / total if total else 0.0
    )
    by_chance = float((weights * expected).sum())
    if by_chance == 0.0:
        return float("nan")
    return 1.0 - float((weights * counts).sum()) / by_chance


def binomial_two_sided(count: int, trials: int, probability: float) -> float:
    """Give the exact two-sided chance of a count at least as unlikely."""
    from scipy.stats import binomtest

    return float(binomtest(count, trials, probability).pvalue) if trials else 1.0
