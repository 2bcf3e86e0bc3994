"""Optimal signal-to-noise ratio and place of a waveform in known noise."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import scipy.fft
from scipy.ndimage import gaussian_filter1d

#: The measured band ends here as a fraction of the sample rate, short of the rate's
#: half where recorders roll off.
TOP_FRACTION = 0.45

#: Share of the whitened energy that lies before the stated start, and after the end.
TAIL = 0.005


@dataclass(frozen=True)
class Measured:
    """What a waveform is to an optimal observer.

    Times in s on the waveform's own clock: ``peak_s`` of most whitened power,
    ``start_s`` and ``end_s`` around 99 % of the whitened energy. ``frequency_hz`` is
    where the whitened energy per octave is largest.
    """

    snr: float
    peak_s: float
    start_s: float
    end_s: float
    frequency_hz: float


class NoiseModel:
    """A channel's true noise spectrum, ready to measure waveforms against.

    Parameters
    ----------
    density : callable
        Frequency in Hz -> one-sided power per Hz, above 0 within the band.
    sample_rate : int
        Hz.
    f_low_hz : float
        Energy below does not count.
    """

    def __init__(
        self,
        density: Callable[[np.ndarray], np.ndarray],
        *,
        sample_rate: int,
        f_low_hz: float,
    ):
        self.sample_rate = sample_rate
        self.f_low_hz = f_low_hz
        self._density = density
        self._weights: dict[int, np.ndarray] = {}

    def weight(self, samples: int) -> np.ndarray:
        """Give 1 / sqrt(S) per Fourier bin, 0 outside the band."""
        if samples not in self._weights:
            f = np.arange(samples // 2 + 1) * (self.sample_rate / samples)
            inside = (f >= self.f_low_hz) & (f <= TOP_FRACTION * self.sample_rate)
            density = np.where(inside, self._density(f), 1.0)
            self._weights[samples] = np.where(inside, 1.0 / np.sqrt(density), 0.0)
        return self._weights[samples]

    def whitened(self, values: np.ndarray) -> tuple[np.ndarray, float]:
        """Give the whitened analytic signal u, and rho^2 = 4 int |h~|^2 / S df.

        The waveform is padded with zeros to 1.5 times its length and at least 8 s.
        sum |u|^2 over the padded length is rho^2; u is cut back to the waveform's own
        samples, which leaves out what whitening spreads beyond them.
        """
        count = len(values)
        samples = 1 << int(np.ceil(np.log2(max(1.5 * count, 8 * self.sample_rate))))
        full = np.zeros(samples, dtype=np.complex128)
        half = full[: samples // 2 + 1]
        half[:] = scipy.fft.rfft(values, samples)
        # sum |ifft|^2 = sum |bins|^2 / n, and the integral is 4 sum |h|^2/S / (fs n)
        half *= self.weight(samples) * (2.0 / np.sqrt(self.sample_rate))
        total = float(np.vdot(half, half).real) / samples
        return scipy.fft.ifft(full, overwrite_x=True)[:count], total

    def snr(self, values: np.ndarray) -> float:
        """Give the optimal SNR of a waveform sampled at the channel's rate."""
        return float(np.sqrt(self.whitened(values)[1]))

    def measure(self, values: np.ndarray, *, first_s: float = 0.0) -> Measured:
        """Measure a waveform whose first sample lies at ``first_s``."""
        u, total = self.whitened(values)
        return self.describe(u, total, first_s=first_s)

    def describe(self, u: np.ndarray, total: float, *, first_s: float) -> Measured:
        """Describe a stretch of a whitened signal whose energy is ``total``."""
        power = np.abs(u) ** 2
        share = np.cumsum(power) / power.sum()
        low, high = np.searchsorted(share, (TAIL, 1.0 - TAIL))
        step = 1.0 / self.sample_rate
        return Measured(
            snr=float(np.sqrt(total)),
            peak_s=first_s + int(np.argmax(power)) * step,
            start_s=first_s + int(low) * step,
            end_s=first_s + (int(high) + 1) * step,
            frequency_hz=self._peak_frequency(u),
        )

    def _peak_frequency(self, u: np.ndarray) -> float:
        samples = scipy.fft.next_fast_len(max(len(u), 2 * self.sample_rate))
        energy = np.abs(scipy.fft.fft(u, samples)[1 : samples // 2]) ** 2
        f = np.arange(1, samples // 2) * (self.sample_rate / samples)
        edges = np.geomspace(self.f_low_hz, 0.5 * self.sample_rate, 513)
        centres = np.sqrt(edges[1:] * edges[:-1])
        # bins narrower than the Fourier step would show its comb, hence the smoothing
        grid = np.interp(centres, f, energy) * centres
        return float(centres[np.argmax(gaussian_filter1d(grid, 8.0))])
