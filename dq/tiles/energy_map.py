"""The plan's tiles as a picture: at each time and frequency the loudest of all planes.

Every tile falls into the pixels that its place in the plan covers, in time its own
spacing and in frequency its row's share of the plane, and a pixel keeps the loudest
one. No tile is lost, however coarse the pixels: the picture's maxima are the tiles'.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from dq.errors import PlanError
from dq.tiles.plan import TilePlan
from dq.tiles.transform import row_coefficients


@dataclass(frozen=True)
class EnergyMap:
    """Normalised tile energies on pixels of time and log frequency.

    Attributes
    ----------
    time_s : ndarray, shape (n_times + 1,)
        Edges of the pixels, s after a reference.
    frequency : ndarray, shape (n_frequencies + 1,)
        Edges of the pixels, Hz, evenly spaced in the logarithm.
    energy : ndarray of float32, shape (n_frequencies, n_times)
        Loudest tile, energy over its mean in noise; NaN where no tile was judged.
    """

    time_s: np.ndarray
    frequency: np.ndarray
    energy: np.ndarray


def row_edges(plan: TilePlan) -> tuple[np.ndarray, np.ndarray]:
    """Give the band that each row stands for in its plane.

    Returns
    -------
    low, high : ndarray, shape (n_rows,)
        Hz, half-way (geometrically) to the neighbouring rows.
    """
    low, high = np.empty(len(plan.q)), np.empty(len(plan.q))
    for plane in np.unique(plan.plane):
        rows = np.flatnonzero(plan.plane == plane)
        f = plan.frequency[rows]
        # rows of a plane have one ratio; a single row stands for its own width
        half = np.sqrt(f[1] / f[0]) if len(f) > 1 else 1.0 + 1.0 / plan.q[rows[0]]
        low[rows], high[rows] = f / half, f * half
    return low, high


def empty_map(
    plan: TilePlan,
    *,
    start_s: float,
    end_s: float,
    n_times: int = 720,
    n_frequencies: int = 320,
) -> EnergyMap:
    """Give a map over the plan's band with nothing in it yet.

    Parameters
    ----------
    plan : TilePlan
    start_s, end_s : float
        Range of the map, s after a reference.
    n_times, n_frequencies : int
        Pixels.

    Returns
    -------
    EnergyMap

    Raises
    ------
    PlanError
        The range is empty.
    """
    if not end_s > start_s:
        raise PlanError(
            f"a map from {start_s:g} s to {end_s:g} s is empty; its end must lie "
            "after its start"
        )
    low, high = row_edges(plan)
    return EnergyMap(
        np.linspace(start_s, end_s, n_times + 1),
        np.geomspace(low.min(), high.max(), n_frequencies + 1),
        np.full((n_frequencies, n_times), np.nan, dtype=np.float32),
    )


def add_tiles(
    picture: EnergyMap,
    spectrum: np.ndarray,
    plan: TilePlan,
    *,
    level: np.ndarray,
    origin_s: float,
    low_s: float,
    high_s: float,
) -> None:
    """Add the tiles of one transform to a map, in place.

    Parameters
    ----------
    picture : EnergyMap
    spectrum : ndarray of complex64, shape (n_bins,)
        Whitened.
    plan : TilePlan
    level : ndarray, shape (n_rows,)
        Mean energy of each row in noise.
    origin_s : float
        Time of the transform's first sample, s after the map's reference.
    low_s, high_s : float
        Tiles centred in ``[low_s, high_s)`` count, s after the map's reference.
    """
    edges = picture.time_s
    low_s, high_s = max(low_s, edges[0]), min(high_s, edges[-1])
    width = (edges[-1] - edges[0]) / (len(edges) - 1)
    middles = 0.5 * (edges[1:] + edges[:-1])
    seen = (middles >= low_s) & (middles < high_s)
    row_low, row_high = row_edges(plan)
    n_frequencies = len(picture.frequency) - 1
    bottom = np.searchsorted(picture.frequency, row_low * (1 + 1e-9), "right") - 1
    top = np.searchsorted(picture.frequency, row_high * (1 - 1e-9), "left")
    bottom = np.clip(bottom, 0, n_frequencies - 1)
    for row in range(len(plan.q)):
        x = row_coefficients(spectrum[None, :], plan, row)[0]
        energy = (np.square(x.real) + np.square(x.imag)) / np.float32(level[row])
        spacing = plan.length_s / len(energy)
        line = np.full(len(middles), np.nan, dtype=np.float32)
        nearest = np.rint((middles[seen] - origin_s) / spacing).astype(np.int64)
        line[seen] = energy[np.clip(nearest, 0, len(energy) - 1)]
        first = max(int(np.ceil((low_s - origin_s) / spacing - 1e-9)), 0)
        last = min(int(np.ceil((high_s - origin_s) / spacing - 1e-9)), len(energy))
        inside = np.arange(first, last)
        column = ((origin_s + inside * spacing - edges[0]) / width).astype(np.int64)
        column = np.clip(column, 0, len(line) - 1)
        line[column] = np.fmax(line[column], 0.0)
        np.maximum.at(line, column, energy[first:last])
        part = picture.energy[bottom[row] : top[row]]
        np.fmax(part, line, out=part)
