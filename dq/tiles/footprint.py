"""Energy of a transient over all tiles that it covers in one plane.

Tiles of one plane share out the energy of the data: with a = dt df the area of a tile,
sum a |X|^2 over time and frequency is the energy there, and sum a (Z - 1) what is above
noise. For a signal of optimal SNR rho in its own footprint the expectation of that sum
is rho^2 / 2.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.fft

from dq.tiles.climb import fold
from dq.tiles.energy_map import row_edges
from dq.tiles.plan import OVERSAMPLING, Q_MIN, TilePlan, bisquare

#: How far a transient's energy is followed beyond its bright tiles' rectangles (sigma_t
#: and sigma_f): a tile three of them from a matched one still holds a tenth of its
#: energy, and 3 % lie beyond.
MARGIN_S, MARGIN_HZ = 1.5, 3.0

#: Room left on either side of a footprint, sigma_t.
SETTLING = 1.0

#: A footprint's spectrum is added up in groups of bins (``climb``): time then repeats
#: after 1 / (width of a group). That is at least this many times the half-length of the
#: footprint: a tile at its end loses 5 % of its energy, and 1.6 % come in from the next
#: repetition.
STRETCH = 8.0


def footprint_energy(
    spectrum: np.ndarray,
    plan: TilePlan,
    *,
    row: np.ndarray,
    start_s: np.ndarray,
    end_s: np.ndarray,
    level: np.ndarray,
    within_s: tuple[float, float],
) -> float:
    """Sum the energy above noise over the surroundings of some runs of tiles.

    Parameters
    ----------
    spectrum : ndarray of complex64, shape (n_bins,)
        Whitened; bins have mean square 1 in noise.
    plan : TilePlan
    row : ndarray of int, shape (n_runs,)
        Rows of one plane.
    start_s, end_s : ndarray, shape (n_runs,)
        Ends of the runs' rectangles, s after the transform's first sample.
    level : ndarray, shape (n_rows,)
        Mean energy of each row in noise.
    within_s : tuple of float
        Only tiles centred in ``[low, high)`` count.

    Returns
    -------
    float
        Sum of a (Z - 1), dimensionless; its expectation is rho^2 / 2.
    """
    beyond = MARGIN_S * plan.sigma_t[row]
    start_s = np.maximum(start_s - beyond, within_s[0])
    end_s = np.minimum(end_s + beyond, within_s[1])
    near = _near_rows(plan, row)
    rows = np.flatnonzero(near.any(axis=1))
    low, high = float(start_s.min()), float(end_s.max())
    if high <= low:
        return 0.0
    cut = _cut_out(spectrum, plan, rows, low, high)
    bottom, top = row_edges(plan)
    total = 0.0
    for r in rows:
        energy, times = _row_energy(cut, plan, r)
        first = np.searchsorted(times, start_s[near[r]])
        last = np.searchsorted(times, end_s[near[r]])
        steps = np.bincount(first, minlength=len(times) + 1).astype(np.int64)
        steps -= np.bincount(last, minlength=len(times) + 1)
        inside = np.cumsum(steps[:-1]) > 0
        area = (top[r] - bottom[r]) * (times[1] - times[0])
        total += area * float(np.sum(energy[inside] / level[r] - 1.0))
    return total


def _near_rows(plan: TilePlan, row: np.ndarray) -> np.ndarray:
    """Say which rows of the plane lie near which run, shape (n_rows, n_runs)."""
    away = np.abs(plan.frequency[:, None] - plan.frequency[row][None, :])
    near = away <= MARGIN_HZ * plan.sigma_f[row][None, :]
    return near & (plan.plane == plan.plane[row[0]])[:, None]


@dataclass(frozen=True)
class _Cut:
    """A band turned to a time, in groups of bins: their middles and step, Hz."""

    groups: np.ndarray
    size: int
    first_hz: float
    step_hz: float
    time_s: float


def _cut_out(spectrum, plan: TilePlan, rows, low_s: float, high_s: float) -> _Cut:
    """Fold the band of some rows around the middle of a stretch of time."""
    length = plan.length_s
    first = int(plan.first_bin[rows].min())
    last = int((plan.first_bin[rows] + plan.width[rows]).max())
    half = 0.5 * (high_s - low_s) + SETTLING * float(plan.sigma_t[rows].max())
    size = max(int(length / (STRETCH * half)), 1)
    middle = 0.5 * (low_s + high_s)
    groups = fold(spectrum, length, middle, first, -(-(last - first) // size), size)
    first_hz = (first + 0.5 * (size - 1)) / length
    return _Cut(groups.astype(np.complex64), size, first_hz, size / length, middle)


def _row_energy(cut: _Cut, plan: TilePlan, row: int) -> tuple[np.ndarray, np.ndarray]:
    """Give a row's energies around the cut's time, and their times."""
    f = plan.frequency[row]
    half = Q_MIN * f / plan.q[row]
    low = max(int(np.ceil((f - half - cut.first_hz) / cut.step_hz)), 0)
    high = int(np.floor((f + half - cut.first_hz) / cut.step_hz)) + 1
    high = min(high, len(cut.groups))
    offset = (cut.first_hz + cut.step_hz * np.arange(low, high) - f) / half
    window = bisquare(offset)
    window /= np.sqrt(cut.size * np.sum(window**2))
    count = scipy.fft.next_fast_len(int(np.ceil(OVERSAMPLING * (high - low))))
    x = scipy.fft.ifft(
        cut.groups[low:high] * window.astype(np.float32), count, norm="forward"
    )
    # the second half of the repetition lies before the cut's time
    energy = scipy.fft.fftshift(np.square(x.real) + np.square(x.imag))
    step = 1.0 / (cut.step_hz * count)
    return energy, cut.time_s + step * (np.arange(count) - count // 2)
