"""Band-limited RMS in octave bands, on cells of a fixed GPS grid.

A finite band-pass and its quadrature, at the lowest halved rate that carries the band,
give its power; the power is averaged over cells, and cells over a Hann window of two
periods of the band's lower edge. White noise of density S has the level
sqrt(S (high - low)), and a tone of amplitude A inside the band A / sqrt(2).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np

from dq.motion.filters import (
    STOP_DB,
    Halvings,
    band_pass,
    centred,
    halving_reach,
    kaiser_half_length,
)

#: Transition of a band's filter over its lower edge. Half keeps the neighbouring
#: octave's middle out at 60 dB and settles within 3.7 periods of the edge (own choice).
TRANSITION = 0.5

#: Rate over lower edge that a band needs: its transition ends at 2.3 times that edge,
#: and what lies above half the rate must not fold into it.
RATE_OVER_LOW = 8.0

#: Shortest cell, s (own choice: strain transients are matched to fractions of a
#: second, but a level says little about less than that).
SHORTEST_CELL_S = 0.5

#: Cells per period of the lower edge.
_CELLS_PER_PERIOD = 4

#: Levels below this share of the largest sample are rounding, not motion: filters in
#: double precision leave parts in 1e15, samples in single precision parts in 1e8.
_ROUNDING = 1e-9


def octave_bands(
    low_hz: float, high_hz: float, sample_rate: float
) -> list[tuple[float, float]]:
    """Give the octaves between two frequencies that a rate can carry.

    Parameters
    ----------
    low_hz, high_hz : float
        Octaves start at ``low_hz``; the last one ends at or below ``high_hz``.
    sample_rate : float
        Hz; a band needs four times its upper edge.

    Examples
    --------
    >>> octave_bands(0.125, 2.0, 4.0)
    [(0.125, 0.25), (0.25, 0.5), (0.5, 1.0)]
    """
    bands, low = [], float(low_hz)
    while 2 * low <= high_hz * (1 + 1e-9) and RATE_OVER_LOW * low <= sample_rate:
        bands.append((low, 2 * low))
        low *= 2
    return bands


@dataclass(frozen=True)
class BandPlan:
    """How one octave's level is measured at one sample rate.

    Attributes
    ----------
    low_hz, high_hz : float
    halvings : int
        The band is filtered at the rate / 2^halvings.
    taps : ndarray, shape (n, 2)
        Its band-pass there, and the quadrature.
    step : int
        The power is sampled at the rate / 2^halvings / step.
    cell_s : float
        Levels are given for cells ``[k cell_s, (k + 1) cell_s)`` of GPS time.
    weights : ndarray
        Of neighbouring cells' mean squares; sum 1, odd length.
    reach_s : float
        A level depends on samples this far before and after its cell.
    """

    low_hz: float
    high_hz: float
    halvings: int
    taps: np.ndarray
    step: int
    cell_s: float
    weights: np.ndarray
    reach_s: float


def plan_bands(bands: list[tuple[float, float]], sample_rate: float) -> list[BandPlan]:
    """Plan the measurement of octave bands.

    Parameters
    ----------
    bands : list of (float, float)
        From :func:`octave_bands`.
    sample_rate : float
        Hz.
    """
    return [_plan(low, high, sample_rate) for low, high in bands]


@cache
def _plan(low: float, high: float, sample_rate: float) -> BandPlan:
    m = max(int(np.floor(np.log2(sample_rate / (RATE_OVER_LOW * low)) + 1e-9)), 0)
    rate = sample_rate / 2**m
    width = TRANSITION * low
    half = kaiser_half_length(width / rate, STOP_DB)
    taps = band_pass(low / rate, high / rate, half, STOP_DB)
    cell = max(1.0 / (_CELLS_PER_PERIOD * low), SHORTEST_CELL_S)
    side = max(round(1.0 / (low * cell)) - 1, 0)
    step = max(k for k in (1, 2, 4) if k == 1 or rate / k * cell >= 1.0)
    hann = np.hanning(2 * side + 3)[1:-1]
    reach = half / rate + halving_reach(m) / sample_rate + (side + 1) * cell
    return BandPlan(low, high, m, taps, step, cell, hann / hann.sum(), reach)


def cell_bounds(first: int, last: int, cell_s: float, rate: float) -> np.ndarray:
    """Give the numbers of the first samples of cells ``first .. last``, last included.

    A sample within 5 % of a cell's start belongs to it, as rounded times need.
    """
    start = np.arange(first, last + 1) * cell_s * rate
    return np.ceil(start - 0.05).astype(np.int64)


def whole_cells(
    count: int, number: int, cell_s: float, rate: float
) -> tuple[int, np.ndarray]:
    """Give the cells that samples ``number .. number + count`` fill, and their bounds.

    Returns
    -------
    first : int
        The first cell.
    bounds : ndarray of int, shape (n_cells + 1,)
        Positions among the samples; empty when no cell is whole.
    """
    per_cell = cell_s * rate
    first = int(np.floor(number / per_cell)) - 1
    last = int(np.ceil((number + count) / per_cell)) + 1
    bounds = cell_bounds(first, last, cell_s, rate) - number
    inside = np.flatnonzero((bounds >= 0) & (bounds <= count))
    if len(inside) < 2:
        return first, bounds[:0]
    return first + int(inside[0]), bounds[inside[0] : inside[-1] + 1]


def band_rms(
    stretch: Halvings, plan: BandPlan, sample_rate: float
) -> tuple[int, np.ndarray]:
    """Give a band's level for every cell that the samples settle.

    Parameters
    ----------
    stretch : Halvings
    plan : BandPlan
    sample_rate : float
        Hz, of the stretch's own samples.

    Returns
    -------
    first : int
        Number of the first cell: it starts at GPS ``first * plan.cell_s``.
    level : ndarray of float, shape (n_cells,)
        RMS in the channel's unit; empty when the stretch is too short.
    """
    values, number = stretch.level(plan.halvings)
    rate = sample_rate / 2**plan.halvings / plan.step
    y, number = centred(values, number, plan.taps, plan.step)
    first, bounds = whole_cells(len(y), number, plan.cell_s, rate)
    side = len(plan.weights) // 2
    if len(bounds) < 2 * side + 2:
        return first + side, np.zeros(0)
    # both columns of a sample lie side by side
    power = np.add.reduceat(np.square(y[: bounds[-1]]).ravel(), 2 * bounds[:-1])
    # a tone's power is half of its squared amplitude
    mean = 0.5 * power / np.diff(bounds)
    level = np.sqrt(np.convolve(mean, plan.weights, mode="valid"))
    level[level < _ROUNDING * np.max(np.abs(values))] = 0.0
    return first + side, level
