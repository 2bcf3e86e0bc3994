"""Products of a fast and a slow channel: noise that a slow motion modulates.

Where a fast disturbance reaches the strain through something that drifts (a spot off
its axis, a mirror tilted), the strain holds the product of both (bilinear coupling,
Ajith et al. 2014, Phys. Rev. D 89 122001; from memory). The product of the samples is
a channel like any other: whitening and transient finder judge it.
"""

from __future__ import annotations

import numpy as np

#: Half-length of the interpolation between the slow channel's samples, in samples
#: (own choice: a Hann-windowed sinc of 16 reproduces up to 0.8 of the slow channel's
#: half rate to a few parts in a thousand).
INTERPOLATION_HALF = 16

#: Fractions of a sample that the interpolation distinguishes.
_PHASES = 1024


def interpolated(values: np.ndarray, position: np.ndarray) -> np.ndarray:
    """Give samples at fractional positions by a windowed sinc of finite length.

    Parameters
    ----------
    values : ndarray, shape (n,)
        Finite, equally spaced.
    position : ndarray of float
        In samples; all at least ``INTERPOLATION_HALF`` from both ends.

    Returns
    -------
    ndarray of float
        Samples whose positions are whole come back unchanged.
    """
    half = INTERPOLATION_HALF
    offset = np.arange(1 - half, half + 1)
    phase = np.arange(_PHASES)[:, None] / _PHASES
    distance = phase - offset
    kernel = np.sinc(distance) * np.cos(0.5 * np.pi * distance / half) ** 2
    kernel /= kernel.sum(axis=1, keepdims=True)
    # to the nearest of the phases: 1 / 2048 of a slow sample at most
    steps = np.round(position * _PHASES).astype(np.int64)
    whole, part = steps // _PHASES, steps % _PHASES
    out = np.zeros(len(position))
    for k, shift in enumerate(offset):
        out += kernel[part, k] * values[whole + shift]
    return out


def detrended(
    values: np.ndarray, time: np.ndarray, knots: np.ndarray, medians: np.ndarray
) -> np.ndarray:
    """Free samples of a slow drift: medians of blocks, joined by straight lines.

    A constant offset would make the product a copy of the fast channel. Straight lines
    between blocks' middles leave no step that the finder would hear.

    Parameters
    ----------
    values, time : ndarray, shape (n,)
        Time in s from any origin.
    knots, medians : ndarray
        Middles of the blocks on the same clock, rising, and the blocks' medians.
    """
    return values - np.interp(time, knots, medians)
