"""From the loudest tile of the plan to the maximum beside it.

The plan's tiles lose up to the mismatch; the loudest one of a transient is therefore
moved over time, frequency and Q until its energy stops growing. Near a maximum the
log of the energy is a parabola along each axis (``mismatch_metric``), so three points
find its top.

Tiles anywhere are sums over the bins of their windows, a hundred thousand of them at
high frequency and low Q. All tiles tried lie within a few sigma_t of the first one,
where the spectrum, turned to that tile's time, may be added up in groups of bins
before the windows are applied: a group's phase turns by little over so short a time.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from dq.tiles.plan import Q_MIN, TilePlan

#: First steps: in time in units of sigma_t, in ln f in units of 1 / Q, in ln Q. About
#: half the plan's spacing at mismatch 0.2; the second round halves them.
STEPS = (0.5, 0.5, 0.3)
ROUNDS = 2

#: Groups that the widest reach of the search is cut into. A group then spans a
#: fortieth of sigma_f, its phase turns by 0.01 over the widest step in time, and the
#: energy of noise far away errs by half a percent of its mean (tested).
GROUPS = 512


@njit(cache=True, nogil=True)
def fold(spectrum, length_s, time_s, low, groups, size):
    """Turn a spectrum to a time and add it up in groups of bins.

    Parameters
    ----------
    spectrum : ndarray of complex64, shape (n_bins,)
        Whitened spectrum of a transform of ``length_s`` seconds.
    length_s, time_s : float
        Duration of the transform, and the time after its first sample, s.
    low, groups, size : int
        First bin, number of groups, bins in a group.

    Returns
    -------
    ndarray of complex128, shape (groups,)
    """
    step = 2.0 * np.pi * time_s / length_s
    turn = complex(np.cos(step), np.sin(step))
    # four bins side by side, each lane turning by four: one lane would wait for itself
    leap = turn * turn
    leap *= leap
    out = np.zeros(groups, dtype=np.complex128)
    for group in range(groups):
        first = low + group * size
        last = min(first + size, spectrum.shape[0])
        # a fresh start for each group keeps the recurrence from drifting
        phase = (step * first) % (2.0 * np.pi)
        f0 = complex(np.cos(phase), np.sin(phase))
        f1 = f0 * turn
        f2, f3 = f1 * turn, f1 * turn * turn
        t0, t1, t2, t3 = 0.0j, 0.0j, 0.0j, 0.0j
        whole = first + 4 * (max(last - first, 0) // 4)
        for k in range(first, whole, 4):
            t0 += f0 * complex(spectrum[k])
            t1 += f1 * complex(spectrum[k + 1])
            t2 += f2 * complex(spectrum[k + 2])
            t3 += f3 * complex(spectrum[k + 3])
            f0, f1, f2, f3 = f0 * leap, f1 * leap, f2 * leap, f3 * leap
        for k in range(whole, last):
            t0 += f0 * complex(spectrum[k])
            f0 *= turn
        out[group] = t0 + t1 + t2 + t3
    return out


@njit(cache=True, nogil=True)
def _energy_at(folded, grid, place, limits):
    """Energy of the tile at (time from the fold, ln f, ln Q); 0 outside the limits.

    ``grid`` holds the middle of the first group and the width of one, Hz, and the bins
    in a group; ``limits`` lowest f, lowest and highest Q, and the highest f that a
    window may reach.
    """
    frequency, q = np.exp(place[1]), np.exp(place[2])
    half_width = Q_MIN * frequency / q
    inside = limits[0] <= frequency and limits[1] <= q <= limits[2]
    if not inside or frequency + half_width > limits[3]:
        return 0.0
    origin, width, size = grid
    first = max(int(np.ceil((frequency - half_width - origin) / width)), 0)
    last = int(np.floor((frequency + half_width - origin) / width))
    last = min(last, folded.shape[0] - 1)
    step = 2.0 * np.pi * place[0] * width
    turn = complex(np.cos(step), np.sin(step))
    factor = 1.0 + 0.0j
    total, norm = 0.0j, 0.0
    for k in range(first, last + 1):
        offset = (origin + k * width - frequency) / half_width
        weight = (1.0 - offset * offset) ** 2
        norm += weight * weight * size
        total += weight * factor * folded[k]
        factor *= turn
    if norm == 0.0:
        return 0.0
    return (total.real * total.real + total.imag * total.imag) / norm


@njit(cache=True, nogil=True)
def climb(folded, grid, place, limits, steps, rounds):
    """Move a tile to the maximum beside it.

    Parameters
    ----------
    folded : ndarray of complex128, shape (n_groups,)
    grid : tuple of float
        Middle of the first group and width of a group, Hz; bins in a group.
    place : ndarray, shape (3,)
        Time from the fold's (s), ln of frequency, ln of Q; moved in place.
    limits : tuple of float
        Lowest frequency, lowest and highest Q, highest frequency of a window.
    steps : ndarray, shape (3,)
        First steps along the axes.
    rounds : int

    Returns
    -------
    float
        Squared modulus of the tile at the new place, not below the old one's.
    """
    best = _energy_at(folded, grid, place, limits)
    trial = place.copy()
    for number in range(rounds):
        for axis in range(3):
            step = steps[axis] / 2.0**number
            around = np.zeros(2)
            for side in range(2):
                trial[:] = place
                trial[axis] += step * (2 * side - 1)
                around[side] = _energy_at(folded, grid, trial, limits)
            left = np.log(max(around[0], 1e-3))
            right = np.log(max(around[1], 1e-3))
            bend = left - 2.0 * np.log(max(best, 1e-3)) + right
            shift = np.sign(right - left)
            if bend < 0.0:
                shift = min(max(0.5 * (left - right) / bend, -1.0), 1.0)
            trial[:] = place
            trial[axis] += step * shift
            energy = _energy_at(folded, grid, trial, limits)
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
    length = plan.length_s
    # all steps of both rounds, in ln f and in ln Q
    shift, widen = 1.5 * STEPS[1] / q, np.exp(1.5 * STEPS[2])
    half = Q_MIN * widen / q
    low = max(int(np.floor(frequency * (1 - shift) * (1 - half) * length)), 1)
    high = int(np.ceil(frequency * (1 + shift) * (1 + half) * length)) + 1
    high = min(high, len(spectrum))
    size = max((high - low) // GROUPS, 1)
    groups = -(-(high - low) // size)
    folded = fold(spectrum, length, time_s, low, groups, size)
    grid = ((low + 0.5 * (size - 1)) / length, size / length, float(size))
    sigma_t = q / (4.0 * np.pi * frequency)
    place = np.array([0.0, np.log(frequency), np.log(q)])
    steps = np.array([STEPS[0] * sigma_t, STEPS[1] / q, STEPS[2]])
    limits = (float(plan.frequency.min()), *q_range, 0.5 * plan.sample_rate)
    energy = climb(folded, grid, place, limits, steps, ROUNDS)
    return energy, time_s + place[0], *np.exp(place[1:]).tolist()
