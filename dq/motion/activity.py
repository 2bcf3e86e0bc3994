"""Levels on a grid become rows like a transient's: when a channel was active.

The witness statistics keep the rows whose ``snr`` reaches a threshold and build windows
from their start and end. One row for a whole swell would veto all of it at every
threshold; one row per cell would be many. A row is therefore a run of neighbouring
cells *within one step of the ladder*, cut at whole seconds of GPS (or cells, where
these are longer). At each step of the ladder the rows above it cover exactly the time
in which the level is above it, which is the least dead time; and a row depends on its
own second alone, so it is the same in every range that holds it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

#: Levels are compared with their median over blocks of this length, s, on a GPS grid
#: (own choice: 64 times the longest resolution time, so a block's median is steady).
REFERENCE_BLOCK_S = 1024.0

#: ... and this many blocks on either side: 85 minutes in all. A swing of minutes
#: stands out, the weather of the night does not (own choice).
REFERENCE_SIDE = 2

#: A median over fewer periods of the band's lower edge than this has no meaning (own
#: choice: half as many independent levels).
LEAST_PERIODS = 16

#: Medians are taken over one cell in this many seconds: 2560 levels give a median to
#: 2 %, and sorting them all would cost more than the filters (own choice).
_MEDIAN_EVERY_S = 2.0


@dataclass(frozen=True)
class Cells:
    """A level on a grid: cell k is ``[number[k], number[k] + 1) * cell_s`` of GPS.

    Attributes
    ----------
    number : ndarray of int64, rising
    level : ndarray of float
    cell_s : float
    """

    number: np.ndarray
    level: np.ndarray
    cell_s: float

    def take(self, chosen: np.ndarray) -> Cells:
        """Give some of the cells."""
        return Cells(self.number[chosen], self.level[chosen], self.cell_s)


def block_reference(cells: Cells, *, least: int) -> np.ndarray:
    """Give for each cell the running median of the level.

    Of an even number of levels, the upper one of the middle two.

    Parameters
    ----------
    cells : Cells
    least : int
        Fewer cells than this give no reference.

    Returns
    -------
    ndarray of float
        NaN where there is no reference.
    """
    every = max(round(_MEDIAN_EVERY_S / cells.cell_s), 1)
    thin = np.flatnonzero(cells.number % every == 0)
    per_block = REFERENCE_BLOCK_S / cells.cell_s
    block = np.floor(cells.number / per_block).astype(np.int64)
    first = np.flatnonzero(np.diff(block, prepend=-1))
    blocks, edges = block[first], np.append(first, len(block))
    lows = np.searchsorted(blocks, blocks - REFERENCE_SIDE)
    highs = np.searchsorted(blocks, blocks + REFERENCE_SIDE, side="right")
    places = np.searchsorted(thin, edges)
    values = cells.level[thin]
    out = np.full(len(block), np.nan)
    for k, (low, high) in enumerate(zip(lows, highs, strict=True)):
        part = values[places[low] : places[high]]
        if edges[high] - edges[low] >= least and len(part):
            middle = len(part) // 2
            out[edges[k] : edges[k + 1]] = np.partition(part, middle)[middle]
    return out


def active_rows(
    ratio: Cells, *, amplitude: np.ndarray, ladder: list[float]
) -> pd.DataFrame:
    """Gather cells at or above the ladder's first step into rows.

    Parameters
    ----------
    ratio : Cells
        What the ladder is compared with.
    amplitude : ndarray, shape (n_cells,)
        Copied from the row's highest cell.
    ladder : list of float
        Rising.

    Returns
    -------
    pandas.DataFrame
        Columns ``gps_time`` (middle of the highest cell), ``gps_start``, ``gps_end``,
        ``snr`` (its ratio), ``lowest`` (of the row), ``amplitude``, ``tile_count``
        (cells), sorted by time.
    """
    kept = np.flatnonzero(ratio.level >= ladder[0])
    number, level = ratio.number[kept], ratio.level[kept].astype(float)
    step = np.searchsorted(np.asarray(ladder, float), level, side="right")
    span = max(1.0, ratio.cell_s)
    second = np.floor(number * (ratio.cell_s / span) + 1e-9).astype(np.int64)
    new = np.ones(len(number), dtype=bool)
    new[1:] = (np.diff(number) != 1) | (np.diff(step) != 0) | (np.diff(second) != 0)
    first = np.flatnonzero(new)
    if len(first) == 0:
        first = first[:0]
        peak = lowest = np.zeros(0)
        where = np.zeros(0, dtype=np.int64)
    else:
        peak = np.maximum.reduceat(level, first)
        lowest = np.minimum.reduceat(level, first)
        row = np.cumsum(new) - 1
        at_peak = np.flatnonzero(level == peak[row])
        where = at_peak[np.unique(row[at_peak], return_index=True)[1]]
    count = np.diff(np.append(first, len(number)))
    return pd.DataFrame(
        {
            "gps_time": (number[where] + 0.5) * ratio.cell_s,
            "gps_start": number[first] * ratio.cell_s,
            "gps_end": (number[first] + count) * ratio.cell_s,
            "snr": peak,
            "lowest": lowest,
            "amplitude": amplitude[kept][where],
            "tile_count": count,
        }
    )
