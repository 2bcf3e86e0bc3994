"""Noise spectra by the median-mean method, on frames that follow slow drift.

Source: Allen, Anderson, Brady, Brown & Creighton 2012, Phys. Rev. D 85 122006
(arXiv gr-qc/0509116). Periodograms of half-overlapped segments are split into even
and odd ones, so that members of a set hardly share samples; the median of each set,
freed of its bias, is averaged over the two sets by their counts. A transient that
disturbs a few segments moves a median little, and where many do, the parts that they
fill are left out (``disturbed``).

Segments go under a squared Hann window, cos^4: its leakage falls with the tenth power
of the distance where Hann's falls with the sixth, so a line a thousand times above
the floor cuts a notch of 1 Hz half-width into the band instead of 2 Hz.

The spectrum of a block is the median over the frames around it, so that a disturbance
of a whole frame does not become the norm either.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
import scipy.fft
from numba import njit

from dq.conditioning.disturbed import GROUP


@lru_cache(maxsize=256)
def median_bias(count: int) -> float:
    """Give the mean of the median of ``count`` exponentials of mean 1.

    With the usual average of the middle two, an even count has the value of
    ``count - 1``.

    Examples
    --------
    >>> round(median_bias(3), 6), round(median_bias(101), 6)
    (0.833333, 0.698073)
    """
    odd = count if count % 2 else count - 1
    terms = np.arange(1, odd + 1)
    return float(np.sum((-1.0) ** (terms + 1) / terms))


@lru_cache(maxsize=256)
def median_variance(count: int) -> float:
    """Give the relative variance of the median of ``count`` exponentials.

    The order statistic r of n exponentials is a sum of independent exponentials of
    means 1/n, 1/(n-1), ..., 1/(n-r+1) (Renyi 1953, from memory).

    Examples
    --------
    >>> median_variance(1)
    1.0
    """
    if count % 2:
        means = 1.0 / np.arange(count, (count - 1) // 2, -1)
    else:
        # half-way from the lower to the upper middle one
        means = np.append(1.0 / np.arange(count, count // 2, -1), 1.0 / count)
    return float(np.sum(means**2) / np.sum(means) ** 2)


@lru_cache(maxsize=32)
def taper(samples: int) -> np.ndarray:
    """Give the periodic squared Hann window."""
    phase = 2.0 * np.pi * np.arange(samples) / samples
    return (0.5 - 0.5 * np.cos(phase)) ** 2


#: Bins that the window correlates, N sum(w^4) / sum(w^2)^2 of cos^4.
CORRELATED = (12870 / 65536) / (70 / 256) ** 2


def periodograms(
    values: np.ndarray, *, sample_rate: float, segment: int, hop: int
) -> np.ndarray:
    """Compute one-sided periodograms of tapered segments.

    Parameters
    ----------
    values : ndarray, shape (n_samples,)
    sample_rate : float
        Hz.
    segment, hop : int
        Length of a segment and distance between starts, samples.

    Returns
    -------
    ndarray of float64, shape (n_segments, segment // 2 + 1)
        Power per Hz. Segments that would reach past the end are left out.
    """
    values = np.asarray(values, dtype=np.float64)
    if len(values) < segment:
        return np.zeros((0, segment // 2 + 1))
    window = taper(segment)
    # single precision costs a hundred-billionth of a segment's mean power in each bin;
    # squares of strain would fall below its range, and a power of two rounds nothing
    rms = np.sqrt(np.mean(np.square(values)))
    unit = 2.0 ** np.round(np.log2(rms)) if rms > 0.0 else 1.0
    scaled = (values / unit).astype(np.float32)
    pieces = np.lib.stride_tricks.sliding_window_view(scaled, segment)[::hop]
    tapered = pieces * window.astype(np.float32)
    transform = scipy.fft.rfft(tapered, axis=1, workers=1)
    power = _squared(transform, 2.0 * unit**2 / (sample_rate * np.sum(window**2)))
    power[:, 0] /= 2.0
    if segment % 2 == 0:
        power[:, -1] /= 2.0
    return power


@njit(cache=True, nogil=True)
def _squared(bins, scale):
    """Give the squared moduli times a scale, in double precision."""
    out = np.empty(bins.shape)
    for row in range(bins.shape[0]):
        for k in range(bins.shape[1]):
            real, imaginary = float(bins[row, k].real), float(bins[row, k].imag)
            out[row, k] = scale * (real * real + imaginary * imaginary)
    return out


def _median(rows: np.ndarray) -> np.ndarray:
    # sorting short contiguous rows beats partitioning down the columns four to one
    ordered = np.sort(np.ascontiguousarray(rows.T), axis=1)
    count = ordered.shape[1]
    middle = ordered[:, (count - 1) // 2]
    if count % 2:
        return middle
    return 0.5 * (middle + ordered[:, count // 2])


def _median_of_used(rows: np.ndarray, used: np.ndarray):
    """Give each column's median over its used rows, freed of bias, and their count.

    ``used`` holds one column per group of ``rows``'s columns.
    """
    count = np.full(rows.shape[1], len(rows))
    known = used.shape[1] * GROUP
    count[:known] = np.repeat(np.count_nonzero(used, axis=0), GROUP)
    # what is left out sorts behind what is used
    held = np.ascontiguousarray(rows.T)
    held[:known][np.repeat(~used.T, GROUP, axis=0)] = np.inf
    held.sort(axis=1)
    column = np.arange(len(held))
    lower, upper = np.maximum(count - 1, 0) // 2, np.minimum(count // 2, len(rows) - 1)
    middle = 0.5 * (held[column, lower] + held[column, upper])
    bias = np.array([1.0, *(median_bias(n) for n in range(1, len(rows) + 1))])
    return np.where(count > 0, middle, 0.0) / bias[count], count


def median_mean(
    power: np.ndarray,
    parity: np.ndarray | None = None,
    used: np.ndarray | None = None,
) -> np.ndarray:
    """Combine half-overlapped periodograms by the median-mean method.

    Parameters
    ----------
    power : ndarray, shape (n_segments, n_bins)
        Periodograms at half-segment steps.
    parity : ndarray of int, shape (n_segments,), optional
        Number of each segment on the common grid, modulo 2; by default they follow
        each other.
    used : ndarray of bool, shape (n_segments, n_groups), optional
        What ``disturbed.undisturbed`` lets in; by default everything.

    Returns
    -------
    ndarray, shape (n_bins,)
        Power per Hz. The bias table holds for interior bins; at zero frequency and at
        Nyquist a periodogram has one degree of freedom and the result is low.
    """
    if parity is None:
        parity = np.arange(len(power)) % 2
    total, weight = 0.0, 0
    for value in (0, 1):
        chosen = np.asarray(parity) == value
        part = power[chosen]
        if not len(part):
            continue
        if used is None:
            middle, count = _median(part) / median_bias(len(part)), len(part)
        else:
            middle, count = _median_of_used(part, used[chosen])
        total = total + count * middle
        weight = weight + count
    return total / weight


def frame_variance(segments: int) -> float:
    """Give the relative variance of a median-mean over ``segments`` segments.

    The two sets are taken as independent: neighbouring periodograms at half overlap
    correlate by only (3 / 35)^2 under cos^4.
    """
    half, rest = segments // 2, segments - segments // 2
    if half == 0:
        return median_variance(rest)
    weights = np.array([half, rest]) / segments
    variances = np.array([median_variance(half), median_variance(rest)])
    return float(np.sum(weights**2 * variances))


@lru_cache(maxsize=512)
def frame_median_bias(frames: int, shape: float) -> float:
    """Give the mean of the median of ``frames`` gamma variates of mean 1.

    Parameters
    ----------
    frames : int
    shape : float
        Shape of the gamma law, the inverse of its relative variance.

    Notes
    -----
    The order statistic r of n is the quantile at a Beta(r, n - r + 1) variate.
    """
    from scipy.special import gammaincinv
    from scipy.stats import beta

    nodes, weights = np.polynomial.legendre.leggauss(200)
    u, w = 0.5 * (nodes + 1.0), 0.5 * weights
    value = gammaincinv(shape, u) / shape
    middle = {(frames + 1) // 2, frames // 2 + 1}
    means = [np.sum(w * value * beta.pdf(u, r, frames - r + 1)) for r in middle]
    return float(np.mean(means))


def combine_frames(spectra: list[np.ndarray], segments: list[int]) -> np.ndarray:
    """Combine the frames around a block into its spectrum.

    Parameters
    ----------
    spectra : list of ndarray, shape (n_bins,)
        Median-mean spectra of the frames.
    segments : list of int
        Segments behind each of them.

    Returns
    -------
    ndarray, shape (n_bins,)
        Power per Hz, free of the median's bias.
    """
    full = max(segments)
    # a frame cut short by a gap is too uncertain beside full ones for a plain median
    kept = [i for i, n in enumerate(segments) if n >= full / 2]
    if len(kept) < 3:
        weighted = (n * s for n, s in zip(segments, spectra, strict=True))
        return sum(weighted) / sum(segments)
    shape = 1.0 / frame_variance(round(np.mean([segments[i] for i in kept])))
    stack = np.stack([spectra[i] for i in kept])
    return _median(stack) / frame_median_bias(len(kept), round(shape, 2))
