"""Whitened transforms of one batch, and all that is known of each."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True)
class Transforms:
    """Some transforms ("items") that follow each other in time.

    Attributes
    ----------
    spectra : ndarray of complex64, shape (n_items, n_bins)
        Whitened; bins have mean square 1 in noise.
    level, noise : ndarray, shape (n_items, n_rows)
        Mean energy of each row in noise, and its effective one-sided noise density.
    origin_s : ndarray, shape (n_items,)
        Time of each transform's first sample, s after a common reference.
    low_s, high_s : ndarray, shape (n_items,)
        Tiles centred in ``[low_s, high_s)`` are looked at, s after the first sample.
    """

    spectra: np.ndarray
    level: np.ndarray
    noise: np.ndarray
    origin_s: np.ndarray
    low_s: np.ndarray
    high_s: np.ndarray
