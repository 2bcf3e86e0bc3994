"""From the loudest tile of the plan to the maximum beside it.

The plan's tiles lose up to the mismatch; the loudest one of a transient is therefore
moved over time, frequency and Q until its energy stops growing, by tiles computed
anywhere with direct sums. Near a maximum the log of the energy is a parabola along
each axis (``mismatch_metric``), so three points find its top.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from dq.tiles.kernels import single_tile
from dq.tiles.plan import Q_MIN, TilePlan

#: First steps: in time in units of sigma_t, in ln f in units of 1 / Q, in ln Q. About
#: half the plan's spacing at mismatch 0.2; the second round halves them.
STEPS = (0.5, 0.5, 0.3)
ROUNDS = 2


@njit(cache=True, nogil=True)
def _energy_at(spectrum, samples, sample_rate, place, limits):
    """Energy of the tile at (time, ln f, ln Q); 0 outside the limits."""
    frequency, q = np.exp(place[1]), np.exp(place[2])
    inside = limits[0] <= frequency and limits[1] <= q <= limits[2]
    if not inside or frequency * (1.0 + limits[3] / q) > 0.5 * sample_rate:
        return 0.0
    tile = single_tile(spectrum, samples, sample_rate, place[0], frequency, q)
    return tile.real * tile.real + tile.imag * tile.imag


@njit(cache=True, nogil=True)
def climb(spectrum, samples, sample_rate, place, limits, steps, rounds):
    """Move a tile to the maximum beside it.

    Parameters
    ----------
    spectrum : ndarray of complex64, shape (n_bins,)
        Whitened spectrum of one transform.
    samples : int
    sample_rate : float
        Hz.
    place : ndarray, shape (3,)
        Time after the first sample (s), ln of frequency, ln of Q; moved in place.
    limits : tuple of float
        Lowest frequency, lowest and highest Q, and the window's half-width sqrt(11).
    steps : ndarray, shape (3,)
        First steps along the axes.
    rounds : int

    Returns
    -------
    float
        Squared modulus of the tile at the new place, not below the old one's.
    """
    best = _energy_at(spectrum, samples, sample_rate, place, limits)
    trial = place.copy()
    for number in range(rounds):
        for axis in range(3):
            step = steps[axis] / 2.0**number
            around = np.zeros(2)
            for side in range(2):
                trial[:] = place
                trial[axis] += step * (2 * side - 1)
                around[side] = _energy_at(spectrum, samples, sample_rate, trial, limits)
            left = np.log(max(around[0], 1e-3))
            right = np.log(max(around[1], 1e-3))
            bend = left - 2.0 * np.log(max(best, 1e-3)) + right
            shift = np.sign(right - left)
            if bend < 0.0:
                shift = min(max(0.5 * (left - right) / bend, -1.0), 1.0)
            trial[:] = place
            trial[axis] += step * shift
            energy = _energy_at(spectrum, samples, sample_rate, trial, limits)
            if energy > best:
                best = energy
                place[:] = trial
    return best


def climb_from(
    spectrum: np.ndarray,
    plan: TilePlan,
    *,
    time_s: float,
    frequency: float,
    q: float,
    q_range: tuple[float, float],
) -> tuple[float, float, float, float]:
    """Move one tile of a plan to the maximum beside it.

    Parameters
    ----------
    spectrum : ndarray of complex64, shape (n_bins,)
    plan : TilePlan
    time_s : float
        After the transform's first sample, s.
    frequency, q : float
        Hz and dimensionless.
    q_range : tuple of float
        Lowest and highest Q.

    Returns
    -------
    energy, time_s, frequency, q : float
        Squared modulus, not normalised by the row's level, and the place.
    """
    place = np.array([time_s, np.log(frequency), np.log(q)])
    sigma_t = q / (4.0 * np.pi * frequency)
    steps = np.array([STEPS[0] * sigma_t, STEPS[1] / q, STEPS[2]])
    limits = (float(plan.frequency.min()), *q_range, Q_MIN)
    energy = climb(
        spectrum, plan.samples, plan.sample_rate, place, limits, steps, ROUNDS
    )
    return energy, place[0], float(np.exp(place[1])), float(np.exp(place[2]))
