"""Coloured Gaussian noise with lines and a slow drift, circular over its length."""

from __future__ import annotations

import numpy as np

LINES_HZ = (50.0, 100.0, 150.0, 302.0, 331.9, 508.5, 1011.0)


def density(f: np.ndarray, *, lines: bool = True) -> np.ndarray:
    """Give a one-sided noise density like a detector's, 1/Hz (own choice).

    A steep wall below 20 Hz, a floor, a rise above 300 Hz, and lines of 0.02 Hz width
    a thousand times above the floor in amplitude.
    """
    f = np.maximum(f, 4.0)
    floor = 1e-46 * ((25 / f) ** 12 + (60 / f) ** 2 + 1 + (f / 300) ** 2)
    if not lines:
        return floor
    return floor * (1 + sum(1e6 / (1 + ((f - f0) / 0.01) ** 2) for f0 in LINES_HZ))


def make_noise(rng, rate: int, seconds: int) -> np.ndarray:
    """Make stationary noise of :func:`density`, periodic over its length."""
    n = rate * seconds
    f = np.fft.rfftfreq(n, 1 / rate)
    z = rng.standard_normal(len(f)) + 1j * rng.standard_normal(len(f))
    return np.fft.irfft(z * np.sqrt(density(f) * rate * n) / 2, n)


def drift(t: np.ndarray, seconds: float) -> np.ndarray:
    """Give the noise level along the stretch: 15 % up and down, once an hour."""
    return 1 + 0.15 * np.sin(2 * np.pi * t / min(seconds, 3600.0))
