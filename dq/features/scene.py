"""What the feature groups look at: loud tiles, line spectrum and filtered samples.

All thresholds are fractions of the transient's own peak, held above what noise reaches,
so that a transient looks the same at SNR 8 and at SNR 80. No absolute loudness passes
from here to a feature.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import scipy.fft

from dq.features.grouped import total, weighted_quantiles
from dq.features.snippets import Snippet
from dq.tiles import band_weights, plan_tiles, row_coefficients

#: Planes of the energy map: Q 6.0, 13.4 and 30.1 (geometric thirds of this range).
#: Clicks show in the first, ringing and lines in the last (own choice).
MAP_Q = (4.0, 45.0)
MAP_MISMATCH = 0.3

#: Lowest frequency of the map, Hz (common practice for ground-based strain).
MAP_LOW_HZ = 10.0

#: A tile counts from this share of the transient's loudest one on, and from this
#: normalised energy on: noise exceeds 5 in 0.7 % of the tiles, P(Z > z) = exp(-z).
PEAK_SHARE = 0.25
FLOOR = 5.0

#: How far beyond the transient's own extent its tiles are sought: in shares of its
#: duration, and as a factor on its band's edges.
TIME_MARGIN = 0.1
BAND_MARGIN = 1.2

#: The band of lines and samples goes this far beyond 5 and 95 % of the energy, octaves.
BAND_SLACK = 0.8

#: Shoulders and least flat part of the window under which lines are measured, s: they
#: resolve 4 Hz for the shortest transient.
SHOULDER_S = 0.1
LEAST_FLAT_S = 0.1


@dataclass(frozen=True)
class LoudTiles:
    """Tiles that count, one array element each; sorted by transient.

    Attributes
    ----------
    item : ndarray of int
        Which transient of the scene.
    plane : ndarray of int
        Plane of the map, lowest Q first.
    time, frequency : ndarray
        Centre, s after the snippet's first sample and Hz.
    sigma_t : ndarray
        Duration of the tile, s.
    energy : ndarray
        Normalised: noise has mean 1.
    weight : ndarray
        Energy above noise times the area dt df that the tile stands for: what the
        tile adds to the transient's energy.
    """

    item: np.ndarray
    plane: np.ndarray
    time: np.ndarray
    frequency: np.ndarray
    sigma_t: np.ndarray
    energy: np.ndarray
    weight: np.ndarray


@dataclass(frozen=True)
class Scene:
    """Transients whose snippets have one rate and one length.

    Attributes
    ----------
    count : int
    sample_rate, length_s : float
    tiles : LoudTiles
    peak : ndarray of int, shape (count,)
        Position of each transient's loudest tile in ``tiles``.
    times : ndarray, shape (count, 5)
        Times at which 5, 25, 50, 75 and 95 % of the energy have passed, s.
    octaves : ndarray, shape (count, 5)
        The same over log2 of the frequency in Hz.
    excess : ndarray, shape (count, n_bins)
        Spectrum of the windowed samples, in units of white noise's mean, less what
        noise has there (less than 1 in the notch of a line); bins of ``1 / length_s``
        Hz.
    low_hz, high_hz : ndarray, shape (count,)
        Band of the energy, within which lines and samples are looked at.
    samples : ndarray of float32, shape (count, n_samples)
        The windowed samples within that band.
    flat_s, extent_s : ndarray, shape (count,)
        Time of repeating samples, and the transient's duration.
    """

    count: int
    sample_rate: float
    length_s: float
    tiles: LoudTiles
    peak: np.ndarray
    times: np.ndarray
    octaves: np.ndarray
    excess: np.ndarray
    low_hz: np.ndarray
    high_hz: np.ndarray
    samples: np.ndarray
    flat_s: np.ndarray
    extent_s: np.ndarray

    def total(self, values: np.ndarray) -> np.ndarray:
        """Sum over each transient's tiles."""
        return total(self.tiles.item, values, self.count)

    def columns(self, bins: int) -> tuple[np.ndarray, np.ndarray]:
        """Give the first and last time bin of each tile, sigma_t on both sides.

        The bins share the time between 5 and 95 % of the energy; what lies outside
        counts to the first or last one.
        """
        start = self.times[self.tiles.item, 0]
        span = np.maximum(self.times[self.tiles.item, -1] - start, 1e-4)
        place = (self.tiles.time - start) / span * bins
        reach = self.tiles.sigma_t / span * bins
        first = np.clip(np.floor(place - reach).astype(int), 0, bins - 1)
        return first, np.clip(np.floor(place + reach).astype(int), 0, bins - 1)

    def grid(self, bins: int, line: np.ndarray, lines: int) -> np.ndarray:
        """Spread the tiles' energy over time bins and given frequency lines.

        Returns
        -------
        ndarray, shape (count, lines, bins)
        """
        first, last = self.columns(bins)
        base = (self.tiles.item * lines + line) * (bins + 1)
        share = self.tiles.weight / (last - first + 1)
        size = self.count * lines * (bins + 1)
        steps = total(base + first, share, size) - total(base + last + 1, share, size)
        steps = steps.reshape(self.count, lines, bins + 1)
        return np.maximum(np.cumsum(steps, axis=2)[:, :, :-1], 0.0)


#: Levels of ``Scene.times`` and ``Scene.octaves``.
LEVELS = (0.05, 0.25, 0.5, 0.75, 0.95)


@lru_cache(maxsize=16)
def map_plan(sample_rate: float, length_s: float, f_low_hz: float):
    """Plan the energy map's tiles for snippets of one rate and length."""
    plan = plan_tiles(
        sample_rate,
        round(length_s * sample_rate),
        f_low=f_low_hz,
        q_min=MAP_Q[0],
        q_max=MAP_Q[1],
        mismatch=MAP_MISMATCH,
        max_settling_s=0.5 * length_s,
    )
    return plan, np.argsort(plan.frequency, kind="stable")


@lru_cache(maxsize=16)
def _weights(
    sample_rate: float, length_s: float, f_low_hz: float, bins: int, top: float
):
    plan, _ = map_plan(sample_rate, length_s, f_low_hz)
    return band_weights(plan, np.linspace(0.0, top, bins))


def make_scene(snippets: list[Snippet], *, f_low_hz: float = MAP_LOW_HZ) -> Scene:
    """Transform snippets of one rate and one length.

    Parameters
    ----------
    snippets : list of Snippet
    f_low_hz : float
        Lowest frequency of the map.

    Returns
    -------
    Scene
        Transients in the order of the snippets.
    """
    rate, length = snippets[0].sample_rate, snippets[0].length_s
    values = np.stack([s.values for s in snippets])
    samples = values.shape[1]
    spectra = scipy.fft.rfft(values, axis=1, workers=1) / np.float32(np.sqrt(samples))
    start, end, low, high, flat = (
        np.array([getattr(s, name) for s in snippets], dtype=np.float64)
        for name in ("start_s", "end_s", "f_low_hz", "f_high_hz", "flat_s")
    )
    margin = TIME_MARGIN * (end - start)
    span = np.stack([start - margin, end + margin], axis=1)
    low, high = low / BAND_MARGIN, high * BAND_MARGIN
    tiles, peak = _loud_tiles(spectra, snippets, span, low, high, f_low_hz)
    count = len(snippets)
    times, octaves = (
        weighted_quantiles(tiles.item, key, tiles.weight, count, LEVELS)
        for key in (tiles.time, np.log2(tiles.frequency))
    )
    # shares of the energy say where the band ends; the table's own edges widen with SNR
    low = np.exp2(octaves[:, 0] - BAND_SLACK)
    high = np.minimum(np.exp2(octaves[:, -1] + BAND_SLACK), 0.5 * rate)
    excess, inside = _windowed(values, times, low, high, snippets)
    return Scene(
        count=count,
        sample_rate=rate,
        length_s=length,
        tiles=tiles,
        peak=peak,
        times=times,
        octaves=octaves,
        excess=excess,
        low_hz=low,
        high_hz=high,
        samples=inside,
        flat_s=flat,
        extent_s=end - start,
    )


def _levels(snippets: list[Snippet], f_low_hz: float) -> np.ndarray:
    """Give the mean energy that noise has in each row, shape (count, n_rows)."""
    first = snippets[0]
    known: dict[int, np.ndarray] = {}
    for s in snippets:
        if id(s.density) not in known:
            grid = len(s.frequency), float(s.frequency[-1])
            weights = _weights(first.sample_rate, first.length_s, f_low_hz, *grid)
            known[id(s.density)] = np.maximum(weights @ s.density, 1e-3)
    return np.stack([known[id(s.density)] for s in snippets])


def _loud_tiles(spectra, snippets, span, low, high, f_low_hz):
    """Find the tiles that count, and the loudest one of each transient."""
    first = snippets[0]
    plan, rows = map_plan(first.sample_rate, first.length_s, f_low_hz)
    level = _levels(snippets, f_low_hz).astype(np.float32)
    # a transient needs the rows of its own band: in the order of their upper edges,
    # those that need a row are the last ones
    order = np.argsort(high, kind="stable")
    spectra, level, span = spectra[order], level[order], span[order]
    bottom, top = low[order], high[order]
    # a band beyond the map's edges is served by its nearest row
    bottom = np.minimum(bottom, plan.frequency.max())
    top = np.maximum(top, plan.frequency.min())
    best = _Loudest(len(order))
    parts = []
    for row in rows:
        f = plan.frequency[row]
        skip = int(np.searchsorted(top, f, side="left"))
        if skip == len(order):
            continue
        energy, first_column = _row_energies(
            spectra[skip:], plan, row, level[skip:, row], span[skip:]
        )
        energy[bottom[skip:] > f] = 0.0
        best.see(energy, skip, first_column, row)
        item, column = np.nonzero(energy >= FLOOR)
        parts.append((item + skip, column + first_column, energy[item, column], row))
    item, column, energy, row = best.with_loud(parts)
    back = order[item]
    at = np.lexsort((column * plan.length_s / plan.tiles[row], row, back))
    return _as_tiles(back[at], column[at], energy[at], row[at], plan, len(order))


def _row_energies(spectra, plan, row, level, span):
    """Give a row's energies and their first column; 0 outside each item's span."""
    n_tiles = int(plan.tiles[row])
    step = plan.length_s / n_tiles
    coefficients = row_coefficients(spectra, plan, row)
    begin = np.clip(np.ceil(span[:, 0] / step).astype(int), 0, n_tiles - 1)
    stop = np.clip(np.floor(span[:, 1] / step).astype(int) + 1, begin + 1, n_tiles)
    a, b = int(begin.min()), int(stop.max())
    parts = np.ascontiguousarray(coefficients[:, a:b]).view(np.float32)
    parts *= parts
    energy = (parts[:, ::2] + parts[:, 1::2]) / level[:, None]
    column = np.arange(a, b)
    energy[(column < begin[:, None]) | (column >= stop[:, None])] = 0.0
    return energy, a


class _Loudest:
    """The loudest tile of each transient, for those without any loud one."""

    def __init__(self, count: int):
        self.energy = np.zeros(count)
        self.column = np.zeros(count, dtype=np.int64)
        self.row = np.zeros(count, dtype=np.int64)

    def see(self, energy, skip: int, first_column: int, row: int) -> None:
        """Take what is louder than before; ties stay with the lower row."""
        column = energy.argmax(axis=1)
        largest = energy[np.arange(len(energy)), column]
        louder = np.flatnonzero(largest > self.energy[skip:])
        self.energy[skip + louder] = largest[louder]
        self.column[skip + louder] = column[louder] + first_column
        self.row[skip + louder] = row

    def with_loud(self, parts):
        """Join the loud tiles of all rows; give quiet transients their loudest one."""
        quiet = np.flatnonzero(self.energy < FLOOR)
        item = np.concatenate([*(p[0] for p in parts), quiet])
        column = np.concatenate([*(p[1] for p in parts), self.column[quiet]])
        energy = np.concatenate([*(p[2] for p in parts), self.energy[quiet]])
        rows = [np.full(len(p[0]), p[3]) for p in parts]
        row = np.concatenate([*rows, self.row[quiet]])
        keep = energy >= PEAK_SHARE * self.energy[item]
        return item[keep], column[keep], energy[keep].astype(np.float64), row[keep]


def _as_tiles(item, column, energy, row, plan, count):
    step = plan.length_s / plan.tiles[row]
    f = plan.frequency[row]
    area = step * plan.frequency[row] * _row_step(plan)[plan.plane[row]]
    weight = np.maximum(energy - 1.0, 0.1) * area / (plan.plane.max() + 1)
    tiles = LoudTiles(
        item, plan.plane[row], column * step, f, plan.sigma_t[row], energy, weight
    )
    by_energy = np.lexsort((-energy, item))
    peak = by_energy[np.searchsorted(item[by_energy], np.arange(count), side="left")]
    return tiles, peak


def _row_step(plan) -> np.ndarray:
    """Give the step between neighbouring rows in ln f, by plane."""
    out = np.ones(int(plan.plane.max()) + 1)
    for plane in np.unique(plan.plane):
        rows = np.log(plan.frequency[plan.plane == plane])
        out[plane] = np.diff(rows).mean() if len(rows) > 1 else 1.0
    return out


def _windowed(values, times, low, high, snippets):
    """Give the excess under a window over the transient, and the samples in band."""
    samples, rate = values.shape[1], snippets[0].sample_rate
    first = times[:, 0] - 0.5 * np.maximum(
        LEAST_FLAT_S - (times[:, 4] - times[:, 0]), 0
    )
    last = times[:, 4] + times[:, 0] - first
    grid = (np.arange(samples) / rate).astype(np.float32)
    rise = (grid - first[:, None].astype(np.float32)) / np.float32(SHOULDER_S)
    fall = (last[:, None].astype(np.float32) - grid) / np.float32(SHOULDER_S)
    window = np.clip(np.minimum(rise, fall) + np.float32(1.0), 0.0, 1.0)
    # a cosine shoulder, sin^2(pi x / 2), by its smooth cubic twin 3 x^2 - 2 x^3
    window *= window * (3.0 - 2.0 * window)
    spectra = scipy.fft.rfft(values * window, axis=1, workers=1)
    norm = np.square(window).sum(axis=1)[:, None]
    parts = np.square(spectra.view(np.float32))
    excess = (parts[:, ::2] + parts[:, 1::2]) / norm
    f = np.arange(spectra.shape[1]) * (rate / samples)
    known: dict[int, np.ndarray] = {}
    for row, s in enumerate(snippets):
        if id(s.density) not in known:
            noise = np.interp(f, s.frequency, s.density)
            known[id(s.density)] = noise.astype(np.float32)
        excess[row] -= known[id(s.density)]
    spectra[(f < low[:, None]) | (f > high[:, None])] = 0.0
    inside = scipy.fft.irfft(spectra, n=samples, axis=1, workers=1)
    return excess, inside
