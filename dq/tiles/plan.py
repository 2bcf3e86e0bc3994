"""Plan of the multi-Q tiling from a worst-case mismatch.

Source: Chatterji, Blackburn, Martin & Katsavounidis 2004, Class. Quantum Grav. 21
S1809; Chatterji 2005, doctoral thesis. A tile is a sinusoid of frequency f under a
bisquare frequency window of standard deviation sigma_f = f / Q; then
sigma_t = Q / (4 pi f). Two tiles that differ by small offsets lose the fraction

    (4 pi^2 f^2 / Q^2) dt^2 + ((2 + Q^2) / (4 f^2)) df^2 + (1 / (2 Q^2)) dQ^2
        - (1 / (f Q)) df dQ                                                  (1)

of their common energy. Giving each of the three directions a third of the mismatch
mu spaces tiles by d = 2 sqrt(mu / 3) in the metric of (1).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from dq.errors import PlanError
from dq.tiles.kernels import fill_window

#: A Q below this would need negative frequencies in the window (sqrt(11)).
Q_MIN = math.sqrt(11.0)

#: Coarse tiles of a row per bin of its window. At 1 they would just hold the row; the
#: margin lets a short interpolation find the tiles between them (``midpoints``).
OVERSAMPLING = 1.1

#: Tiles are trusted this many sigma_t away from anything that is not data; the
#: Gaussian envelope has fallen to exp(-9/4) of its amplitude, energy to 1.1 %.
SETTLING_SIGMAS = 3.0


def tile_step(mismatch: float) -> float:
    """Give the step d between tiles in the metric of (1), dimensionless.

    Examples
    --------
    >>> round(tile_step(0.2), 6)
    0.516398
    """
    return 2.0 * math.sqrt(mismatch / 3.0)


def mismatch_metric(f: float, q: float, dt: float, df: float, dq: float) -> float:
    """Evaluate (1): fractional energy lost between two near tiles.

    Parameters
    ----------
    f, q : float
        Frequency in Hz and Q of the tile.
    dt, df, dq : float
        Offsets in s, Hz and Q.
    """
    return (
        (2.0 * math.pi * f / q * dt) ** 2
        + (2.0 + q * q) / (4.0 * f * f) * df * df
        + dq * dq / (2.0 * q * q)
        - df * dq / (f * q)
    )


def plane_qs(q_min: float, q_max: float, mismatch: float) -> np.ndarray:
    """Give the Q of each plane: geometric midpoints of equal steps in ln Q.

    Examples
    --------
    >>> plane_qs(4.0, 64.0, 0.2).round(4).tolist()
    [5.6569, 11.3137, 22.6274, 45.2548]
    """
    ratio = q_max / q_min
    count = math.ceil(math.log(ratio) / (math.sqrt(2.0) * tile_step(mismatch)))
    count = max(count, 1)
    return q_min * ratio ** ((np.arange(count) + 0.5) / count)


def row_frequencies(
    q: float, f_low: float, f_high: float, mismatch: float
) -> np.ndarray:
    """Give the row frequencies of one plane in Hz: geometric midpoints.

    Examples
    --------
    >>> rows = row_frequencies(5.6568542, 10.0, 1238.2, 0.2)
    >>> len(rows)
    28
    """
    ratio = f_high / f_low
    stretch = 0.5 * math.sqrt(2.0 + q * q) * math.log(ratio)
    count = max(math.ceil(stretch / tile_step(mismatch)), 1)
    return f_low * ratio ** ((np.arange(count) + 0.5) / count)


def tiles_in_row(q: float, f: float, length_s: float, mismatch: float) -> int:
    """Give the least number of tiles that a row of ``length_s`` needs."""
    return math.ceil(2.0 * math.pi * f * length_s / (q * tile_step(mismatch)))


def highest_frequency(q: float, sample_rate: float) -> float:
    """Give the highest tile frequency of a plane, Hz: its window ends at Nyquist.

    Examples
    --------
    >>> round(highest_frequency(4.0, 4096.0), 3)
    1119.642
    """
    return 0.5 * sample_rate / (1.0 + Q_MIN / q)


def bisquare(x: np.ndarray) -> np.ndarray:
    """Give the unnormalised bisquare window (1 - x^2)^2, 0 outside -1..1."""
    inside = np.abs(x) < 1.0
    return np.where(inside, (1.0 - np.square(x)) ** 2, 0.0)


@dataclass(frozen=True)
class TilePlan:
    """All rows of a tiling for one sample rate and transform length.

    Attributes
    ----------
    sample_rate : float
        Hz.
    samples : int
        Samples of one transform; ``length_s`` is their duration in s.
    mismatch : float
        Worst-case fractional energy loss.
    q, frequency : ndarray, shape (n_rows,)
        Q and frequency (Hz) of each row.
    plane : ndarray of int, shape (n_rows,)
        Index of the row's plane.
    coarse : ndarray of int, shape (n_rows,)
        Tiles of the row that are transformed, a product of small primes.
    first_bin : ndarray of int, shape (n_rows,)
        First spectrum bin of the row's window.
    width : ndarray of int, shape (n_rows,)
        Bins of the row's window.
    scale : ndarray, shape (n_rows,)
        Height of the row's window: its squares add up to 1.
    """

    sample_rate: float
    samples: int
    mismatch: float
    q: np.ndarray
    frequency: np.ndarray
    plane: np.ndarray
    coarse: np.ndarray
    first_bin: np.ndarray
    width: np.ndarray
    scale: np.ndarray

    def window(self, row: int) -> np.ndarray:
        """Give a row's window over its bins, float32.

        Windows are made when they are used: at 16 kHz all of them would take 40 MiB.
        """
        out = np.empty(self.width[row], dtype=np.float32)
        q, f = self.q[row], self.frequency[row]
        start = (self.first_bin[row] / self.length_s - f) * q / (Q_MIN * f)
        step = q / (self.length_s * Q_MIN * f)
        fill_window(start, step, self.scale[row], out)
        return out

    @property
    def tiles(self) -> np.ndarray:
        """Tiles of each row, two for every coarse one."""
        return 2 * self.coarse

    @property
    def length_s(self) -> float:
        """Duration of one transform, s."""
        return self.samples / self.sample_rate

    @property
    def sigma_t(self) -> np.ndarray:
        """Standard deviation of each row's tile energy in time, s."""
        return self.q / (4.0 * np.pi * self.frequency)

    @property
    def sigma_f(self) -> np.ndarray:
        """Standard deviation of each row's tile energy in frequency, Hz."""
        return self.frequency / self.q

    @property
    def f_low(self) -> float:
        """Lower edge of the lowest row's window, Hz."""
        return float(np.min(self.frequency * (1.0 - Q_MIN / self.q)))

    @property
    def longest_half_extent_s(self) -> float:
        """Half-duration of the longest tile's unit-area rectangle, s."""
        return math.sqrt(math.pi) * float(np.max(self.sigma_t))

    @property
    def settling_s(self) -> float:
        """Time that the longest tile needs on either side, s."""
        return settling_s(self.q, self.frequency)


def settling_s(q: np.ndarray, frequency: np.ndarray) -> float:
    """Give the time that the longest tile of some rows needs on either side, s."""
    return SETTLING_SIGMAS * float(np.max(q / (4.0 * np.pi * frequency)))


def band_rows(
    sample_rate: float,
    *,
    f_low: float,
    f_high: float | None,
    q_min: float,
    q_max: float,
    mismatch: float,
    max_settling_s: float,
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """List the rows that the band and the settling limit allow.

    Returns
    -------
    q, frequency : ndarray, shape (n_rows,)
    plane : ndarray of int, shape (n_rows,)

    Raises
    ------
    PlanError
        No row fits.
    """
    qs, frequencies, planes = [], [], []
    for plane, q in enumerate(plane_qs(q_min, q_max, mismatch)):
        top = highest_frequency(q, sample_rate)
        top = min(top, f_high) if f_high else top
        shortest = SETTLING_SIGMAS * q / (4.0 * math.pi * max_settling_s)
        bottom = max(f_low, shortest)
        if top <= bottom:
            continue
        rows = row_frequencies(q, bottom, top, mismatch)
        qs.append(np.full(len(rows), q))
        frequencies.append(rows)
        planes.append(np.full(len(rows), plane))
    if not qs:
        limit = highest_frequency(q_max, sample_rate)
        raise PlanError(
            f"no tile fits between f_low={f_low:g} Hz and "
            f"f_high={f_high or limit:g} Hz at {sample_rate:g} Hz; the rate carries "
            f"up to {limit:.4g} Hz at Q {q_max:g}: lower f_low_hz or leave the "
            "channel out"
        )
    return np.concatenate(qs), np.concatenate(frequencies), np.concatenate(planes)


def plan_tiles(
    sample_rate: float,
    samples: int,
    *,
    f_low: float,
    f_high: float | None = None,
    q_min: float = 4.0,
    q_max: float = 64.0,
    mismatch: float = 0.2,
    max_settling_s: float = math.inf,
) -> TilePlan:
    """Plan the rows of a tiling over ``samples`` samples.

    Parameters
    ----------
    sample_rate : float
        Hz.
    samples : int
        Length of the transform in samples.
    f_low, f_high : float
        Band in Hz; ``f_high`` defaults to what the rate carries in each plane.
    q_min, q_max, mismatch : float
        Range of Q and worst-case fractional energy loss.
    max_settling_s : float
        Rows whose tiles need more than this on either side are left out.

    Returns
    -------
    TilePlan

    Raises
    ------
    PlanError
        No row fits between the edges.
    """
    from scipy.fft import next_fast_len

    q, frequency, plane = band_rows(
        sample_rate,
        f_low=f_low,
        f_high=f_high,
        q_min=q_min,
        q_max=q_max,
        mismatch=mismatch,
        max_settling_s=max_settling_s,
    )
    length = samples / sample_rate
    half_width = Q_MIN * frequency / q
    first = np.floor((frequency - half_width) * length).astype(np.int64) + 1
    last = np.ceil((frequency + half_width) * length).astype(np.int64)
    first, last = np.maximum(first, 1), np.minimum(last, samples // 2)
    width, scale, coarse = last - first, np.empty(len(q)), []
    for k in range(len(q)):
        bins = np.arange(first[k], last[k]) / length
        window = bisquare((bins - frequency[k]) / half_width[k])
        scale[k] = 1.0 / math.sqrt(np.sum(window**2))
        tiles = tiles_in_row(q[k], frequency[k], length, mismatch)
        need = max(math.ceil(tiles / 2), math.ceil(OVERSAMPLING * width[k]))
        coarse.append(next_fast_len(need))
    return TilePlan(
        sample_rate=sample_rate,
        samples=samples,
        mismatch=mismatch,
        q=q,
        frequency=frequency,
        plane=plane,
        coarse=np.array(coarse),
        first_bin=first,
        width=width,
        scale=scale,
    )


def band_weights(plan: TilePlan, frequency: np.ndarray):
    """Give the rows' squared windows on a coarse frequency grid.

    Parameters
    ----------
    plan : TilePlan
    frequency : ndarray, shape (n_bins,)
        Hz, rising evenly.

    Returns
    -------
    scipy.sparse.csr_array, shape (n_rows, n_bins)
        Each row adds up to 1: multiplied with a spectral density it gives the mean
        energy of the row's tiles.
    """
    from scipy.sparse import csr_array

    step = frequency[1] - frequency[0]
    columns, values, starts = [], [], [0]
    for q, f in zip(plan.q, plan.frequency, strict=True):
        half_width = Q_MIN * f / q
        # a row narrower than the grid leans on the bins on either side of its centre
        half_width = max(half_width, 1.01 * step)
        first = max(int(np.ceil((f - half_width) / step)), 1)
        last = min(int(np.floor((f + half_width) / step)), len(frequency) - 1)
        index = np.arange(first, last + 1)
        weight = bisquare((frequency[index] - f) / half_width) ** 2
        columns.append(index)
        values.append(weight / weight.sum())
        starts.append(starts[-1] + len(index))
    shape = (len(plan.q), len(frequency))
    data = np.concatenate(values), np.concatenate(columns), np.array(starts)
    return csr_array(data, shape=shape)
