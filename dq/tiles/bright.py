"""Bright tiles: far below the threshold of a transient, far above the mean of noise.

A disturbance that spreads over many tiles may leave no loud one, but it leaves many
bright ones beside each other. Only the coarse tiles of every second row are looked at:
a row's coarse tiles hold all of its energy, and rows lie a standard deviation apart.
"""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np
from numba import njit

from dq.tiles.kernels import CHUNK, _energy
from dq.tiles.plan import TilePlan


@dataclass(frozen=True)
class BrightRuns:
    """Runs of bright coarse tiles of one row, one array element each.

    Attributes
    ----------
    item, row : ndarray of int
        Which transform and which row of the plan.
    first, last, peak : ndarray of int
        First, last and brightest coarse tile of the run.
    count : ndarray of int
        Bright tiles in it; there may be darker ones between them.
    total, energy : ndarray of float
        Normalised energy (mean 1 in noise) summed over the bright tiles, and of the
        brightest.
    """

    item: np.ndarray
    row: np.ndarray
    first: np.ndarray
    last: np.ndarray
    peak: np.ndarray
    count: np.ndarray
    total: np.ndarray
    energy: np.ndarray

    def __len__(self) -> int:
        return len(self.item)

    def take(self, index: np.ndarray) -> BrightRuns:
        """Give the runs at an index or mask."""
        return BrightRuns(*(getattr(self, f.name)[index] for f in fields(self)))

    @staticmethod
    def of(places: np.ndarray, row: np.ndarray, sums: np.ndarray) -> BrightRuns:
        """Put together what :func:`find_bright` gave."""
        item, first, last, peak, count = places.T
        return BrightRuns(item, row, first, last, peak, count, *sums.T.astype(float))

    @staticmethod
    def none() -> BrightRuns:
        """Give no runs."""
        whole, real = np.zeros(0, dtype=np.int64), np.zeros(0)
        return BrightRuns(*(whole,) * 6, real, real)


def second_rows(plan: TilePlan) -> np.ndarray:
    """Say which rows of a plan are looked at: every second one of each plane.

    Returns
    -------
    ndarray of bool, shape (n_rows,)
    """
    first = np.searchsorted(plan.plane, plan.plane)
    return (np.arange(len(plan.q)) - first) % 2 == 0


@njit(cache=True, nogil=True)
def find_bright(x, maxima, low, high, bound, gap, places, sums):
    """Find the runs of bright coarse tiles in one row of each item.

    Parameters
    ----------
    x : ndarray of float32, shape (n_items, 2 * n_coarse)
        Coarse coefficients, real and imaginary parts in turn.
    maxima : ndarray of float32
        Of ``kernels.chunk_maxima``.
    low, high : ndarray of int64, shape (n_items,)
        Coarse tiles ``[low, high)`` of each item are looked at.
    bound : ndarray of float32, shape (n_items,)
        Squared modulus from which on a tile is bright.
    gap : int
        Bright tiles this far apart still belong to one run.
    places : ndarray of int64, shape (capacity, 5)
        Out: item, first, last, brightest tile and number of bright tiles.
    sums : ndarray of float32, shape (capacity, 2)
        Out: squared moduli summed over the bright tiles, and the largest.

    Returns
    -------
    int
        Number of runs; those beyond the capacity were not stored.
    """
    found = -1
    capacity = places.shape[0]
    for item in range(x.shape[0]):
        row, least = x[item], bound[item]
        last = low[item] - gap - 1
        for chunk in range(low[item] // CHUNK, -(-high[item] // CHUNK)):
            if maxima[item, chunk] < least:
                continue
            start, stop = chunk * CHUNK, (chunk + 1) * CHUNK
            for k in range(max(start, low[item]), min(stop, high[item])):
                energy = _energy(row, k)
                if energy < least:
                    continue
                if k - last > gap:
                    found += 1
                    if found < capacity:
                        places[found, 0], places[found, 1] = item, k
                        places[found, 4] = 0
                        sums[found, 0] = sums[found, 1] = np.float32(0.0)
                last = k
                if found < capacity:
                    places[found, 2] = k
                    places[found, 4] += 1
                    sums[found, 0] += energy
                    if energy > sums[found, 1]:
                        sums[found, 1], places[found, 3] = energy, k
    return found + 1
