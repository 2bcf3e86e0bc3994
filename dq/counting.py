"""Counting statistics: chance of coincidences, exact intervals of small numbers."""

from __future__ import annotations

import numpy as np

#: Below this chance the incomplete gamma function nears the end of float64.
_FAR = 1e-250


def poisson_significance(count, expected) -> np.ndarray:
    """Give -log10 of the chance of at least ``count`` events when ``expected`` come.

    Parameters
    ----------
    count : array_like of float
        Whole numbers, or counts divided by a dispersion.
    expected : array_like of float

    Returns
    -------
    ndarray
        0 where the count is 0; infinite where nothing was expected and something came.

    Notes
    -----
    S = -log10 sum_{k >= n} mu^k e^-mu / k! = -log10 P(n, mu), P the regularised lower
    incomplete gamma function (Smith et al. 2011, Class. Quantum Grav. 28 235005). Far
    out the function underflows, and the sum is taken as its first term times a
    confluent hypergeometric series, in logarithms.

    Examples
    --------
    >>> poisson_significance([1, 10, 100], [0.1, 5, 10]).round(4).tolist()
    [1.0215, 1.4972, 62.2677]
    """
    from scipy.special import gammainc, gammaln, hyp1f1

    n, mu = np.broadcast_arrays(
        np.asarray(count, dtype=float), np.asarray(expected, dtype=float)
    )
    some = (n > 0) & (mu > 0)
    n_, mu_ = np.where(some, n, 1.0), np.where(some, mu, 1.0)
    tail = gammainc(n_, mu_)
    far = tail < _FAR
    out = -np.log10(np.where(far, 1.0, tail))
    if np.any(far):
        k, m = np.where(far, n_, 1.0), np.where(far, mu_, 1.0)
        series = np.log(hyp1f1(1.0, k + 1.0, m))
        logs = k * np.log(m) - m - gammaln(k + 1.0) + series
        out = np.where(far, -logs / np.log(10.0), out)
    out = np.where((mu <= 0) & (n > 0), np.inf, out)
    return np.where(n <= 0, 0.0, np.maximum(out, 0.0))


def binomial_chance(count: int, trials: int, probability: float) -> float:
    """Give the chance of at least ``count`` successes in ``trials``."""
    from scipy.special import betainc

    if count <= 0:
        return 1.0
    if count > trials:
        return 0.0
    return float(betainc(count, trials - count + 1, min(max(probability, 0.0), 1.0)))


def garwood(count: int, confidence: float = 0.95) -> tuple[float, float]:
    """Give the exact two-sided interval of a Poisson mean.

    Notes
    -----
    Garwood 1936, Biometrika 28 437.

    Examples
    --------
    >>> [round(x, 4) for x in garwood(10)]
    [4.7954, 18.3904]
    """
    from scipy.special import gammaincinv

    tail = (1.0 - confidence) / 2.0
    low = 0.0 if count == 0 else float(gammaincinv(count, tail))
    return low, float(gammaincinv(count + 1, 1.0 - tail))


def clopper_pearson(
    count: float, trials: float, confidence: float = 0.95
) -> tuple[float, float]:
    """Give the exact two-sided interval of a proportion.

    Notes
    -----
    Clopper & Pearson 1934, Biometrika 26 404. Without trials it is (0, 1). Counts need
    not be whole: an effective number of trials gives the interval of Korn & Graubard
    1998, Survey Methodology 24 193 (from memory).

    Examples
    --------
    >>> [round(x, 5) for x in clopper_pearson(1, 10)]
    [0.00253, 0.44502]
    """
    from scipy.special import betaincinv

    if trials == 0:
        return 0.0, 1.0
    tail = (1.0 - confidence) / 2.0
    low = 0.0 if count == 0 else betaincinv(count, trials - count + 1, tail)
    high = 1.0 if count == trials else betaincinv(count + 1, trials - count, 1.0 - tail)
    return float(low), float(high)
