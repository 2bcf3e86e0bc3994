"""Predicted fringe frequency of light scattered by something that moves.

Light that meets a surface moving at speed v and returns after n passes beats with the
main beam at f = 2 n |v| / lambda (Accadia et al. 2010, Class. Quantum Grav. 27 194011;
from memory). While f lies within the strain's band, scattered light is heard there.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from functools import cache

import numpy as np

from dq.motion.activity import Cells, active_rows
from dq.motion.filters import (
    STOP_DB,
    Halvings,
    centred,
    differentiator,
    halving_reach,
    kaiser_half_length,
    low_pass,
)
from dq.motion.levels import whole_cells

#: Speeds are held below this frequency, Hz: motion that scatters light lies at 0.1 to
#: 5 Hz, and differentiating raises a sensor's white noise as frequency^1.5.
MOTION_TOP_HZ = 5.0

#: From the top to the stop band, Hz (own choice: 0.6 s of settling).
_TRANSITION_HZ = 3.0

#: Rate that the speed is computed at, at least, Hz: four times the stop band's edge.
_RATE_HZ = 32.0

#: Cells of the speed, s: 1/8 s follows arches of 3 Hz motion, which come 6 a second,
#: only as a whole, and those of 0.1 to 1 Hz one by one.
FRINGE_CELL_S = 0.125

_PREFIXES = {
    "": 0,
    "k": 3,
    "h": 2,
    "d": -1,
    "c": -2,
    "m": -3,
    "u": -6,
    "\N{MICRO SIGN}": -6,
    "\N{GREEK SMALL LETTER MU}": -6,
    "n": -9,
    "p": -12,
    "f": -15,
}
_UNIT = re.compile(r"(?P<prefix>\S?)m(?P<per>\s*/\s*s|[ .]s\^?-1)?")


def length_scale(unit: str, quantity: str) -> float | None:
    """Give the factor from a unit to m (displacement) or m/s (velocity).

    Parameters
    ----------
    unit : str
        An SI prefix or none, ``m``, and for a velocity ``/s``, `` s^-1`` or ``.s-1``.
        The micro sign may be ``u`` or either of its Unicode characters.
    quantity : str
        ``displacement`` or ``velocity``, in any letter case.

    Returns
    -------
    float or None
        None where the unit is no unit of the quantity.

    Examples
    --------
    >>> length_scale("um", "displacement"), length_scale("mm/s", "velocity")
    (1e-06, 0.001)
    >>> length_scale("um", "velocity") is None
    True
    """
    found = _UNIT.fullmatch(unit.strip())
    wanted = {"displacement": False, "velocity": True}.get(quantity.strip().lower())
    if found is None or wanted is None or bool(found["per"]) != wanted:
        return None
    power = _PREFIXES.get(found["prefix"])
    return None if power is None else float(f"1e{power}")


def fringe_frequency(speed, *, passes: int = 1, wavelength_m: float):
    """Give 2 n |v| / lambda in Hz.

    Parameters
    ----------
    speed : float or ndarray
        m/s.
    passes : int
        How often the light meets the moving surface, n.
    wavelength_m : float

    Examples
    --------
    >>> round(float(fringe_frequency(1e-6, wavelength_m=1064e-9)), 5)
    1.8797
    """
    return 2 * passes * np.abs(speed) / wavelength_m


@dataclass(frozen=True)
class FringeSource:
    """What a channel's samples are to the fringe frequency.

    Attributes
    ----------
    velocity : bool
        False: the channel is a displacement.
    scale : float
        m or m/s per unit of the channel.
    """

    velocity: bool
    scale: float


def speed_reach(sample_rate: float) -> float:
    """Give how far in s a cell's speed depends on samples before and after it."""
    m = _halvings(sample_rate)
    half = kaiser_half_length(_TRANSITION_HZ * 2**m / sample_rate, STOP_DB)
    return (half * 2**m + halving_reach(m)) / sample_rate + FRINGE_CELL_S


def _halvings(sample_rate: float) -> int:
    return max(int(np.floor(np.log2(sample_rate / _RATE_HZ) + 1e-9)), 0)


@cache
def _speed_taps(source: FringeSource, rate: float) -> np.ndarray:
    half = kaiser_half_length(_TRANSITION_HZ / rate, STOP_DB)
    cut = (MOTION_TOP_HZ + _TRANSITION_HZ / 2) / rate
    if source.velocity:
        return low_pass(cut, half, STOP_DB)[:, None] * source.scale
    return differentiator(cut, half, STOP_DB)[:, None] * (rate * source.scale)


def speed_extremes(
    stretch: Halvings, source: FringeSource, sample_rate: float
) -> tuple[int, np.ndarray, np.ndarray]:
    """Give the lowest and highest velocity of every settled cell.

    Parameters
    ----------
    stretch : Halvings
    source : FringeSource
    sample_rate : float
        Hz, of the stretch's own samples; above twice 8 Hz.

    Returns
    -------
    first : int
        Number of the first cell: it starts at GPS ``first * FRINGE_CELL_S``.
    low, high : ndarray of float, shape (n_cells,)
        m/s, with their sign.
    """
    m = _halvings(sample_rate)
    values, number = stretch.level(m)
    rate = sample_rate / 2**m
    taps = _speed_taps(source, rate)
    out, number = centred(values, number, taps, 1)
    v = out[:, 0]
    first, bounds = whole_cells(len(v), number, FRINGE_CELL_S, rate)
    if len(bounds) < 2:
        return first, np.zeros(0), np.zeros(0)
    v = v[: bounds[-1]]
    low = np.minimum.reduceat(v, bounds[:-1])
    return first, low, np.maximum.reduceat(v, bounds[:-1])


def fringe_rows(
    cells: Cells,
    *,
    passes: int,
    edge_hz: float,
    ladder: list[float],
    wavelength_m: float,
):
    """Give the stretches in which the predicted frequency exceeds the ladder's steps.

    Parameters
    ----------
    cells : Cells
        Speeds in m/s, freed of the mean velocity.
    passes : int
    edge_hz : float
        The strain band's lower edge.
    ladder : list of float
        Steps of the predicted frequency over the edge; 1 is the edge itself.
    wavelength_m : float

    Returns
    -------
    pandas.DataFrame
        ``dq.tables.TRANSIENTS``: ``snr`` is the largest predicted frequency over the
        edge, ``frequency_hz`` that frequency, ``f_low_hz`` and ``f_high_hz`` the
        lowest and highest of the row's cells, ``q`` frequency over their distance (at
        least one over the row's duration), ``amplitude`` the speed in m/s.
    """
    predicted = fringe_frequency(cells.level, passes=passes, wavelength_m=wavelength_m)
    table = active_rows(
        Cells(cells.number, predicted / edge_hz, cells.cell_s),
        amplitude=cells.level,
        ladder=ladder,
    )
    high = table["snr"] * edge_hz
    low = table.pop("lowest") * edge_hz
    duration = table["gps_end"] - table["gps_start"]
    table["frequency_hz"] = table["f_high_hz"] = high
    table["f_low_hz"] = low
    table["q"] = high / np.maximum(high - low, 1.0 / duration)
    return table
