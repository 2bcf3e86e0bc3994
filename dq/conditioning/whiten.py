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
from numba import njit


def difference(values: np.ndarray) -> np.ndarray:
    """Give the second central difference; two samples shorter than the input."""
    values = np.asarray(values)
    out = np.empty(max(len(values) - 2, 0))
    fill_difference(values, out)
    return out


@njit(cache=True, nogil=True)
def fill_difference(values, out):
    """Fill ``out`` with the second central difference, in double precision."""
    for k in range(out.shape[0]):
        middle = np.float64(values[k + 1])
        out[k] = 2.0 * middle - np.float64(values[k]) - np.float64(values[k + 2])


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


#: Items whose forward transforms go together: the FFT library works on four rows (two
#: series, two filters) side by side at three quarters of the price of one by one.
TOGETHER = 2


#: The ends of a transform fade in and out over this time, s: a line that breaks off
#: rings over the whole band, most where the difference has made the noise small (own
#: choice, within the settling time). Measured at 512 Hz: without it a line 10 000 times
#: as high as the noise of 1 Hz raises transients at the seams, with it one 100 000
#: times as high does not.
TAPER_S = 0.5


def taper_ends(values: np.ndarray, length: int) -> None:
    """Fade both ends in place, as a raised cosine over ``length`` samples."""
    length = min(length, len(values) // 2)
    fade = np.sin(0.5 * np.pi * (np.arange(length) + 0.5) / max(length, 1)) ** 2
    values[:length] *= fade
    values[len(values) - length :] *= fade[::-1]


def whitened_spectra(
    parts: list[tuple[np.ndarray, int, Whitening]],
    length: int,
    *,
    sample_rate: float,
    out: np.ndarray | None = None,
    work: np.ndarray | None = None,
) -> np.ndarray:
    """Transform and whiten the samples of several blocks.

    Parameters
    ----------
    parts : list of (ndarray, int, Whitening)
        Contiguous samples of each block, the position of the first one in the
        transform, and the filter. Outside the samples the differenced series counts as
        zero, and whatever lies within the settling time of their ends must not be
        used.
    length : int
        Samples of the transform.
    sample_rate : float
        Hz.
    out : ndarray of complex64, optional
        Where the result goes; new by default.
    work : ndarray of float64, shape (2 * TOGETHER, length), optional
        Memory to work in; fresh pages would cost as much as zeroing them.

    Returns
    -------
    ndarray of complex64, shape (n_parts, length // 2 + 1)
        Bins of mean square ``whitening.density`` in noise. Double precision until the
        filter has been applied: differenced data span many decades.
    """
    if out is None:
        out = np.empty((len(parts), length // 2 + 1), dtype=np.complex64)
    if work is None:
        work = np.empty((2 * min(TOGETHER, len(parts)), length))
    scale = np.sqrt(2.0 / (sample_rate * length))
    for first in range(0, len(parts), TOGETHER):
        group = parts[first : first + TOGETHER]
        rows = work[: 2 * len(group)]
        for k, (samples, offset, whitening) in enumerate(group):
            begin, end = offset + 1, offset + len(samples) - 1
            row = rows[2 * k]
            row[:begin] = 0.0
            row[end:] = 0.0
            fill_difference(samples, row[begin:end])
            taper_ends(row[begin:end], round(TAPER_S * sample_rate))
            _place_taps(whitening.taps, rows[2 * k + 1])
        bins = scipy.fft.rfft(rows, axis=1, workers=1)
        for k in range(len(group)):
            apply_filter(bins[2 * k], bins[2 * k + 1], scale, out[first + k])
    return out


def whitened_spectrum(
    samples: np.ndarray,
    offset: int,
    length: int,
    whitening: Whitening,
    *,
    sample_rate: float,
) -> np.ndarray:
    """Transform and whiten one block; see :func:`whitened_spectra`."""
    part = (samples, offset, whitening)
    return whitened_spectra([part], length, sample_rate=sample_rate)[0]


def _place_taps(taps: np.ndarray, row: np.ndarray) -> None:
    """Lay symmetric taps around the start of a longer, periodic row, else zero."""
    half = len(taps) // 2
    end = len(row) - (len(taps) - half)
    row[:half] = taps[:half]
    row[half:end] = 0.0
    row[end:] = taps[half:]


@njit(cache=True, nogil=True)
def apply_filter(bins, response, scale, out):
    """Multiply bins by the real part of a response and a scale, in single precision."""
    for k in range(out.shape[0]):
        out[k] = bins[k] * (response[k].real * scale)
