"""Islands of bright tiles, and how much more energy they hold than noise would.

A sweep, a comb or a burst of noise spreads an optimal SNR of 10 over so many tiles that
none of them is loud. Bright tiles (Z >= 5) of one plane that lie within each other's
stretched rectangles make an island, the rule by which loud tiles make a transient
(clusters of black pixels: Sylvestre 2002, Phys. Rev. D 66 102004, from memory). An
island's score is

    T = sum a (Z - 3)         over its bright tiles,

a = dt df being the tile's share of the plane's area in units of an independent tile.
Taking 3 for each unit of area balances what another tile adds in noise (its
expectation above the brightness is 6) against the ways in which noise could have put
one there. In noise the rate of islands falls exponentially with T, like that of tiles
with Z, so that each T has a Z that is as rare (``equivalent_energy``).
"""

from __future__ import annotations

import numpy as np
from numba import njit

from dq.tiles import BrightRuns, TilePlan
from dq.tiles.bright import second_rows
from dq.tiles.energy_map import row_edges
from dq.transients.cluster import HALF_EXTENT, LINK

#: Energy from which on a tile is bright. 3 finds no more of the invented site's shapes
#: than 5, 6 finds one in a hundred less; 5 leaves few tiles to look at.
BRIGHT = 5.0

#: What a unit of area costs. Of 2 to 4, 2.5 to 3.5 find the same within a percent.
COST = 3.0

#: Islands below this score are noise nearly always and are forgotten (1300 an hour
#: reach it in Gaussian noise at 4096 Hz). At 4.5 the finder takes a tenth longer and
#: finds one more of the invented site's shapes in a hundred.
LEAST_SCORE = 6.0

#: The energy of a tile that is as rare in Gaussian noise as a cluster of score T is
#: OFFSET + SLOPE T: fitted to 12 h of noise, confirmed on other noise by
#: ``tests/benchmarks/shapes.py noise``.
OFFSET, SLOPE = 8.3, 0.62


def equivalent_energy(score: np.ndarray) -> np.ndarray:
    """Give the energy of the tile that is as rare in noise as an island."""
    return OFFSET + SLOPE * np.asarray(score, float)


def needed_score(energy: float) -> float:
    """Give the score of an island that is as rare in noise as a tile."""
    return (energy - OFFSET) / SLOPE


def tile_area(plan: TilePlan) -> np.ndarray:
    """Give the area dt df that one coarse tile of each row stands for.

    A row of which no bright tiles are sought stands for nothing, and the one below it
    for both.
    """
    low, high = row_edges(plan)
    chosen = second_rows(plan)
    above = np.append(~chosen[1:], False)
    high[above] = np.append(high[1:], 0.0)[above]
    return np.where(chosen, (high - low) * plan.length_s / plan.coarse, 0.0)


def find_islands(
    runs: BrightRuns, plan: TilePlan, *, origin_s: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Link bright runs to islands and score them.

    Parameters
    ----------
    runs : BrightRuns
        Sorted by row and, in a row, by time.
    plan : TilePlan
    origin_s : ndarray, shape (n_items,)
        Time of each transform's first sample, s after a common reference.

    Returns
    -------
    island : ndarray of int, shape (n_runs,)
        Number of each run's island.
    score : ndarray, shape (n_runs,)
        Each run's own part of its island's score.
    """
    if len(runs) == 0:
        return np.zeros(0, dtype=np.int64), np.zeros(0)
    spacing = plan.length_s / plan.coarse[runs.row]
    start = origin_s[runs.item] + runs.first * spacing
    end = origin_s[runs.item] + runs.last * spacing
    bounds = np.searchsorted(runs.row, np.arange(len(plan.q) + 1))
    reach = LINK * HALF_EXTENT * plan.sigma_t
    island = np.arange(len(runs))
    link_rows(start, end, bounds, _linked_rows(plan), reach, island)
    return island, tile_area(plan)[runs.row] * (runs.total - COST * runs.count)


def loudest_islands(island: np.ndarray, score: np.ndarray) -> np.ndarray:
    """Say which runs belong to islands of at least ``LEAST_SCORE``."""
    if len(island) == 0:
        return np.zeros(0, dtype=bool)
    return np.bincount(island, score)[island] >= LEAST_SCORE


def _linked_rows(plan: TilePlan) -> np.ndarray:
    """Give, for each row, the end of the rows above it that it may touch."""
    half = LINK * HALF_EXTENT * plan.sigma_f
    low, high = plan.frequency - half, plan.frequency + half
    end = np.empty(len(plan.q), dtype=np.int64)
    for plane in np.unique(plan.plane):
        rows = np.flatnonzero(plan.plane == plane)
        end[rows] = rows[0] + np.searchsorted(low[rows], high[rows])
    return end


@njit(cache=True, nogil=True)
def _root(parent, k):
    while parent[k] != k:
        parent[k] = parent[parent[k]]
        k = parent[k]
    return k


@njit(cache=True, nogil=True)
def link_rows(start, end, bounds, last_row, reach, parent):
    """Join the runs of near rows that lie near in time; runs of a row are sorted.

    Parameters
    ----------
    start, end : ndarray, shape (n_runs,)
        Centres of each run's first and last tile, s, sorted by row, then start.
    bounds : ndarray of int, shape (n_rows + 1,)
        Where each row's runs begin.
    last_row : ndarray of int, shape (n_rows,)
        End of the rows that a row may touch.
    reach : ndarray, shape (n_rows,)
        How far a row's tiles reach in time, s.
    parent : ndarray of int, shape (n_runs,)
        In: each run's own number. Out: the lowest number of its island.
    """
    for row in range(len(last_row)):
        if bounds[row] == bounds[row + 1]:
            continue
        for other in range(row, last_row[row]):
            gap = reach[row] + reach[other]
            first = bounds[other]
            for k in range(bounds[row], bounds[row + 1]):
                while first < bounds[other + 1] and end[first] < start[k] - gap:
                    first += 1
                m = first
                while m < bounds[other + 1] and start[m] <= end[k] + gap:
                    if parent[k] != parent[m]:
                        a, b = _root(parent, k), _root(parent, m)
                        parent[max(a, b)] = min(a, b)
                    m += 1
    for k in range(len(parent)):
        parent[k] = _root(parent, k)
