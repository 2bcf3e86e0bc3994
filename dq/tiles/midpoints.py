"""Tiles half-way between coarse ones, by a short interpolation.

A row's window limits its coefficients to a band of ``width`` bins, so somewhat more
than ``width`` coarse tiles hold all there is to know of the row, and a tile half-way
between two of them is a weighted sum over its neighbours. The weights minimise the
mean square error of a signal that fills the window w,

    integral w(x)^2 | 1 - sum_j g_j cos(pi (j - 1/2) x / r) |^2 dx,   |x| < 1,

with r the oversampling and j the offset in coarse tiles from the one before the
mid-point.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np

from dq.tiles.plan import OVERSAMPLING, bisquare

#: Coarse tiles used on each side of a mid-point: with the plan's oversampling of 1.1
#: the error is 7e-4 of the row's amplitude (tested).
REACH = 8


def _basis(x: np.ndarray) -> np.ndarray:
    offsets = np.arange(-REACH + 1, REACH + 1) - 0.5
    return np.cos(np.pi * offsets[None, :] * x[:, None] / OVERSAMPLING)


@lru_cache(maxsize=1)
def midpoint_weights() -> np.ndarray:
    """Give the weights of the coarse tiles around a mid-point.

    Returns
    -------
    ndarray of float32, shape (2 * REACH,)
        For offsets ``-REACH + 1 .. REACH`` from the tile before the mid-point.
    """
    x = np.linspace(-1, 1, 4001)
    weight = bisquare(x)
    half = 2.0 * _basis(x)[:, REACH:]
    solution, *_ = np.linalg.lstsq(half * weight[:, None], weight, rcond=None)
    return np.concatenate([solution[::-1], solution]).astype(np.float32)


def midpoint_error() -> float:
    """Give the root-mean-square error of a mid-point over the row's amplitude."""
    x = np.linspace(-1, 1, 8001)
    energy = bisquare(x) ** 2
    made = _basis(x) @ midpoint_weights().astype(float)
    return float(np.sqrt(np.sum(energy * (made - 1) ** 2) / np.sum(energy)))


def screening_energy(threshold: float) -> float:
    """Give the energy that a coarse tile needs for its mid-points to be computed.

    Notes
    -----
    Coarse tiles lie at most 0.86 sigma_t from a mid-point, where two tiles share the
    fraction c = exp(-0.86^2 / 8) = 0.912 of their amplitude. If the mid-point's energy
    is z, each of its two neighbours has the mean amplitude c sqrt(z) and, along it, a
    standard deviation of sqrt((1 - c^2) / 2) = 0.29. Both fall more than four of these
    short of it once in more than a million crossings.
    """
    amplitude = 0.912 * np.sqrt(threshold) - 4.0 * 0.29
    return float(max(amplitude, 0.0) ** 2)
