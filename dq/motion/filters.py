"""Finite filters on a fixed sample grid.

Every filter here has a finite, symmetric (or antisymmetric) response, so what a sample
touches ends where it is said to end, and a result does not depend on where reading
began. A sample's *number* is its GPS time times the rate, rounded: halving the rate
keeps even numbers, whatever stretch is at hand.
"""

from __future__ import annotations

import numpy as np

#: Stop band of the octave filters and of the differentiator, dB: a tone one octave off
#: with a thousand times the band's amplitude adds one part in two (own choice).
STOP_DB = 60.0

#: Stop band of the rate halving, dB: aliases lie below the octave filters' own leak.
ALIAS_DB = 80.0


#: Rounds that place the flanks; each leaves about a tenth of the error.
_ROUNDS = 8


def kaiser_half_length(transition: float, stop_db: float) -> int:
    """Give the half-length in samples of a Kaiser-windowed filter.

    Parameters
    ----------
    transition : float
        Width of the transition over the sample rate.
    stop_db : float

    Notes
    -----
    Kaiser's rule, N - 1 = (A - 7.95) / (14.36 transition) (Oppenheim & Schafer,
    Discrete-Time Signal Processing; from memory).
    """
    return int(np.ceil((stop_db - 7.95) / (2 * 14.36 * transition)))


def _window(half: int, stop_db: float) -> np.ndarray:
    return np.kaiser(2 * half + 1, 0.1102 * (stop_db - 8.7))


def low_pass(cut: float, half: int, stop_db: float) -> np.ndarray:
    """Give a low-pass of gain 1 at frequency 0 that halves amplitudes at ``cut``.

    Parameters
    ----------
    cut : float
        Over the sample rate.
    half : int
        Half-length in samples.
    """
    n = np.arange(-half, half + 1)
    taps = 2 * cut * np.sinc(2 * cut * n) * _window(half, stop_db)
    return taps / taps.sum()


def band_pass(low: float, high: float, half: int, stop_db: float) -> np.ndarray:
    """Give a band-pass and its quadrature, gain 1 at the mean of the edges.

    For a tone in the band the squares of both outputs add up to its squared amplitude
    at every moment, so the power can be sampled as slowly as it changes. The flanks are
    placed such that white noise passes as through sharp edges.

    Parameters
    ----------
    low, high : float
        Edges over the sample rate.
    half : int
        Half-length in samples.
    stop_db : float

    Returns
    -------
    ndarray, shape (2 half + 1, 2)
        Neither column answers to an offset or a ramp.
    """
    outward, width = 0.0, high - low
    for _ in range(_ROUNDS):
        taps = _flanked(low - outward, high + outward, half, stop_db)
        # white noise of unit variance has the density 2 over the rate
        outward += (width - 0.5 * np.sum(taps[:, 0] ** 2)) / 2
    return taps


def _flanked(low: float, high: float, half: int, stop_db: float) -> np.ndarray:
    n = np.arange(-half, half + 1).astype(float)
    shape = _window(half, stop_db)
    safe = np.where(n == 0, 1.0, np.pi * n)
    even = 2 * (high * np.sinc(2 * high * n) - low * np.sinc(2 * low * n)) * shape
    odd = (np.cos(2 * np.pi * low * n) - np.cos(2 * np.pi * high * n)) / safe * shape
    # what the stop band leaves of an offset and of a ramp would be called a level
    even -= shape * (even.sum() / shape.sum())
    odd -= shape * n * (np.sum(odd * n) / np.sum(shape * n**2))
    middle = np.pi * (low + high) * n
    even /= np.sum(even * np.cos(middle))
    odd /= np.sum(odd * np.sin(middle))
    return np.stack([even, odd], axis=1)


def differentiator(cut: float, half: int, stop_db: float) -> np.ndarray:
    """Give the derivative per sample, held to frequencies below ``cut``.

    The ideal response 2 pi i f for |f| < cut, windowed; the taps are applied as a
    correlation, so a ramp of slope 1 gives 1 exactly.
    """
    n = np.arange(-half, half + 1).astype(float)
    safe = np.where(n == 0, 1.0, n)
    angle = 2 * np.pi * cut * n
    ideal = (np.sin(angle) - angle * np.cos(angle)) / (np.pi * safe**2)
    taps = np.where(n == 0, 0.0, ideal) * _window(half, stop_db)
    return taps / np.sum(taps * n)


def correlate(values: np.ndarray, taps: np.ndarray, step: int = 1) -> np.ndarray:
    """Give ``y[k, c] = sum_j taps[j, c] values[step k + j]`` where all samples exist.

    Rows of the samples times a banded matrix: twice the multiplications, but the
    library's fast ones (measured: five times as fast as a plain correlation).

    Parameters
    ----------
    values : ndarray, shape (n,)
    taps : ndarray, shape (m, c)
    step : int

    Returns
    -------
    ndarray of float64, shape (max((n - m) // step + 1, 0), c)
    """
    length, columns = taps.shape
    count = (len(values) - length) // step + 1
    if count <= 0:
        return np.zeros((0, columns))
    width = step * -(-max(length - step, 32) // step)
    per_row = width // step
    rows = -(-count // per_row)
    padded = np.empty((rows + 1, width))
    used = min(len(values), padded.size)
    padded.ravel()[:used] = values[:used]
    padded.ravel()[used:] = 0.0
    matrix = np.zeros((2 * width, per_row, columns))
    for k in range(per_row):
        matrix[k * step : k * step + length, k] = taps
    matrix = matrix.reshape(2 * width, -1)
    out = padded[:-1] @ matrix[:width]
    out += padded[1:] @ matrix[width:]
    return out.reshape(-1, columns)[:count]


def centred(
    values: np.ndarray, number: int, taps: np.ndarray, step: int
) -> tuple[np.ndarray, int]:
    """Filter around the samples whose numbers are multiples of ``step``.

    Parameters
    ----------
    values : ndarray, shape (n,)
    number : int
        Of the first sample.
    taps : ndarray, shape (2 half + 1, c)
    step : int

    Returns
    -------
    out : ndarray, shape (k, c)
    first : int
        Number of the first output at the rate / step.
    """
    half = len(taps) // 2
    first = -(-(number + half) // step)
    return correlate(values[step * first - half - number :], taps, step), first


def _rate_divider(factor: int) -> np.ndarray:
    kept, folding = 2.3 / (8.0 * factor), 1.0 / factor - 2.3 / (8.0 * factor)
    half = kaiser_half_length(folding - kept, ALIAS_DB)
    return low_pass(0.5 / factor, half, ALIAS_DB)[:, None]


#: Low-pass before the rate is divided by 2 or by 4. The divided rate carries its lower
#: 2.3 eighths undisturbed: an octave band ends with its transition at 2.3 times its
#: lower edge, and is filtered at 8 times that edge at least.
_DIVIDERS = {2: _rate_divider(2), 4: _rate_divider(4)}


class Halvings:
    """A stretch of samples at its own rate, half of it, a quarter, as asked for.

    Levels are asked for in rising order; one that nobody asks for costs nothing.

    Parameters
    ----------
    values : ndarray, shape (n,)
        Finite samples.
    number : int
        Number of the first one.
    """

    def __init__(self, values: np.ndarray, number: int):
        self._levels = {0: (values, number)}

    def level(self, m: int) -> tuple[np.ndarray, int]:
        """Give the samples at the rate / 2^m, and the number of the first there."""
        while m not in self._levels:
            have = max(k for k in self._levels if k < m)
            factor = 2 if m - have == 1 else 4
            values, number = self._levels[have]
            out, first = centred(values, number, _DIVIDERS[factor], factor)
            self._levels[have + factor // 2] = (out[:, 0], first)
        return self._levels[m]


def halving_reach(m: int) -> float:
    """Give how far m halvings reach to each side at most, in samples of the rate."""
    return max(len(taps) // 2 / (f - 1) for f, taps in _DIVIDERS.items()) * 2.0**m
