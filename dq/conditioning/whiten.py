"""Whitening of one block: high-pass, pre-emphasis and a filter of finite length.

The samples pass a second central difference, y[n] = 2 x[n] - x[n-1] - x[n+1], whose
response 4 sin^2(pi f / f_s) is real: it delays nothing, removes offset and slope
exactly, and keeps strong low-frequency motion from leaking over the spectrum. The
noise spectrum is measured on y, and the whitening filter is the inverse Fourier
transform of high-pass / sqrt(S_y), cut to ``half_length`` by a Hann lag window. A
disturbance therefore spreads by exactly that length, which is the settling time.

Bins are scaled such that noise gives them mean square 1.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.fft


def difference(values: np.ndarray) -> np.ndarray:
    """Give the second central difference; two samples shorter than the input."""
    values = np.asarray(values, dtype=np.float64)
    return 2.0 * values[1:-1] - values[:-2] - values[2:]


def difference_response(frequency: np.ndarray, sample_rate: float) -> np.ndarray:
    """Give the (real) response of the second central difference."""
    return 4.0 * np.sin(np.pi * np.asarray(frequency) / sample_rate) ** 2


def high_pass(frequency: np.ndarray, edge_hz: float) -> np.ndarray:
    """Give a raised-cosine high-pass: 0 up to half the edge, 1 from the edge on."""
    ramp = np.clip(2.0 * np.asarray(frequency) / edge_hz - 1.0, 0.0, 1.0)
    return np.sin(0.5 * np.pi * ramp) ** 2


@dataclass(frozen=True)
class Whitening:
    """The whitening filter of one block.

    Attributes
    ----------
    taps : ndarray, shape (segment,)
        Impulse response, zero lag first, negative lags at the end.
    frequency : ndarray, shape (n_bins,)
        Hz, the coarse grid of the noise spectrum.
    density : ndarray, shape (n_bins,)
        Expected mean square of whitened bins on the coarse grid: near 1, less where
        the filter cuts lines deeper or the high-pass acts.
    gain : ndarray, shape (n_bins,)
        Squared response from strain to whitened, difference included: the inverse of
        the noise spectrum that the filter stands for, Hz per unit squared.
    """

    taps: np.ndarray
    frequency: np.ndarray
    density: np.ndarray
    gain: np.ndarray


def design_whitening(
    spectrum: np.ndarray,
    *,
    sample_rate: float,
    segment: int,
    half_length: int,
    edge_hz: float,
) -> Whitening:
    """Design the whitening filter from the spectrum of the differenced samples.

    Parameters
    ----------
    spectrum : ndarray, shape (segment // 2 + 1,)
        One-sided noise spectrum of the second difference, power per Hz.
    sample_rate : float
        Hz.
    segment, half_length : int
        Samples behind a spectrum, and half-length of the filter.
    edge_hz : float
        The high-pass passes from here on.

    Notes
    -----
    Inverting an uncertain spectrum raises the mean, E(1/S) ~ (1 + v)/S, but the block
    itself is among the data behind its spectrum, which lowers it; with five frames the
    two cancel to within the one percent that the tests allow.
    """
    frequency = np.arange(segment // 2 + 1) * (sample_rate / segment)
    amplitude = np.zeros(len(frequency))
    passed = high_pass(frequency, edge_hz)
    inside = (passed > 0) & (spectrum > 0)
    amplitude[inside] = passed[inside] / np.sqrt(spectrum[inside])
    # zero frequency and Nyquist follow another law (one degree of freedom)
    amplitude[-1] = amplitude[-2]
    taps = scipy.fft.irfft(amplitude, n=segment, workers=1)
    lag = np.minimum(np.arange(segment), segment - np.arange(segment))
    window = np.where(lag < half_length, hann_lag(lag, half_length), 0.0)
    taps *= window
    response = scipy.fft.rfft(taps, workers=1).real
    density = np.square(response) * spectrum
    gain = np.square(response * difference_response(frequency, sample_rate))
    return Whitening(taps, frequency, density, gain)


def hann_lag(lag: np.ndarray, half_length: int) -> np.ndarray:
    """Give the Hann lag window: 1 at lag 0, 0 at ``half_length``."""
    return 0.5 + 0.5 * np.cos(np.pi * lag / half_length)


def whitened_spectrum(
    samples: np.ndarray,
    offset: int,
    length: int,
    whitening: Whitening,
    *,
    sample_rate: float,
) -> np.ndarray:
    """Transform and whiten the samples of one block.

    Parameters
    ----------
    samples : ndarray, shape (n,)
        Contiguous samples; outside them the differenced series counts as zero, and
        whatever lies within the settling time of their ends must not be used.
    offset : int
        Position of the first sample in the transform.
    length : int
        Samples of the transform.

    Returns
    -------
    ndarray of complex64, shape (length // 2 + 1,)
        Bins of mean square ``whitening.density`` in noise.
    """
    series = np.zeros(length)
    series[offset + 1 : offset + len(samples) - 1] = difference(samples)
    spectrum = scipy.fft.rfft(series, workers=1)
    response = filter_response(whitening.taps, length)
    response *= np.sqrt(2.0 / (sample_rate * length))
    return (spectrum * response).astype(np.complex64)


def filter_response(taps: np.ndarray, length: int) -> np.ndarray:
    """Give the real response of symmetric taps on the grid of a longer transform."""
    half = len(taps) // 2
    padded = np.zeros(length)
    padded[:half] = taps[:half]
    padded[length - (len(taps) - half) :] = taps[half:]
    return scipy.fft.rfft(padded, workers=1).real
