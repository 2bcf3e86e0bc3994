"""Tile energies from whitened spectra: one inverse FFT per row, then a close look.

A tile's coefficient is the inverse transform of the whitened spectrum under the row's
window (Chatterji et al. 2004). With a window whose squares add up to 1 and a spectrum
whose bins have mean square 1, the energy Z = X conj(X) has mean 1 in Gaussian noise and
P(Z > z) = exp(-z); a matched signal of optimal SNR rho adds rho^2 / 2 to the mean.

The transform gives the coarse tiles of a row; the tiles between them are interpolated
only where a coarse one is loud enough for its neighbour to count (``midpoints``), which
finds what the transform of the whole row finds at little more than half its price.

Several transforms ("items") go through each row together, since the FFT library works
on them side by side.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.fft

from dq.tiles.bright import BrightRuns, find_bright, second_rows
from dq.tiles.kernels import CHUNK, apply_window, chunk_maxima, find_runs
from dq.tiles.midpoints import midpoint_weights, screening_energy
from dq.tiles.plan import TilePlan

#: Complex64 coefficients that one row may hold at a time (32 MiB): longer batches of
#: long rows are cut, so that memory follows the block and not the batch.
_ROW_LIMIT = 4 * 2**20


@dataclass(frozen=True)
class TileRuns:
    """Runs of consecutive tiles above threshold, one array element each.

    Attributes
    ----------
    item, row : ndarray of int
        Which transform and which row of the plan.
    first, last, peak : ndarray of int
        First, last and loudest tile of the run.
    energy, before, after : ndarray of float
        Normalised energy (mean 1 in noise) of the loudest tile and of the tiles before
        and after it.
    total : ndarray of float
        Normalised energy summed over the run.
    """

    item: np.ndarray
    row: np.ndarray
    first: np.ndarray
    last: np.ndarray
    peak: np.ndarray
    energy: np.ndarray
    before: np.ndarray
    after: np.ndarray
    total: np.ndarray

    def __len__(self) -> int:
        return len(self.item)


def row_coefficients(spectra: np.ndarray, plan: TilePlan, row: int) -> np.ndarray:
    """Compute all tiles of one row, those between the coarse ones included.

    Parameters
    ----------
    spectra : ndarray of complex64, shape (n_items, n_bins)
        Whitened spectra; bins have mean square 1 in noise.
    plan : TilePlan
    row : int

    Returns
    -------
    ndarray of complex64, shape (n_items, n_tiles)
        Coefficients at times ``k * length_s / n_tiles`` after the first sample; their
        phases turn with the tile (only moduli are meant to be used).
    """
    work = np.empty(len(spectra) * int(plan.tiles[row]), dtype=np.complex64)
    return _transform(spectra, plan, row, int(plan.tiles[row]), work)


def _transform(spectra, plan: TilePlan, row: int, n_tiles: int, work) -> np.ndarray:
    buffer = work[: len(spectra) * n_tiles].reshape(len(spectra), n_tiles)
    parts, out = spectra.view(np.float32), buffer.view(np.float32)
    apply_window(parts, plan.first_bin[row], plan.window(row), out)
    return scipy.fft.ifft(buffer, axis=1, norm="forward", overwrite_x=True, workers=1)


def tile_runs(
    spectra: np.ndarray,
    plan: TilePlan,
    *,
    level: np.ndarray,
    start_s: np.ndarray,
    end_s: np.ndarray,
    threshold: float,
) -> TileRuns:
    """Find the tiles at or above an energy threshold, as runs in time.

    Parameters
    ----------
    spectra : ndarray of complex64, shape (n_items, n_bins)
    plan : TilePlan
    level : ndarray, shape (n_items, n_rows)
        Mean energy that noise has in each row (near 1); energies are divided by it.
    start_s, end_s : ndarray, shape (n_items,)
        Tiles centred in ``[start_s, end_s)`` after the first sample are looked at.
    threshold : float
        Normalised energy.

    Returns
    -------
    TileRuns
    """
    return scan_tiles(
        spectra,
        plan,
        level=level,
        start_s=start_s,
        end_s=end_s,
        threshold=threshold,
        bright=None,
    )[0]


def scan_tiles(
    spectra: np.ndarray,
    plan: TilePlan,
    *,
    level: np.ndarray,
    start_s: np.ndarray,
    end_s: np.ndarray,
    threshold: float,
    bright: float | None,
    gap_sigmas: float = 0.0,
) -> tuple[TileRuns, BrightRuns]:
    """Find the tiles above threshold and, in the same pass, the bright ones.

    Parameters
    ----------
    spectra, plan, level, start_s, end_s, threshold
        As of :func:`tile_runs`.
    bright : float or None
        Normalised energy from which on a coarse tile is bright; None: none is. Every
        second row is looked at (``second_rows``).
    gap_sigmas : float
        Bright tiles up to this many sigma_t apart make one run.

    Returns
    -------
    TileRuns, BrightRuns
    """
    runs, lit = _Gathered(), _Gathered()
    lows, highs = _tile_range(plan, start_s), _tile_range(plan, end_s)
    bounds = (threshold * level.T).astype(np.float32)
    screens = (screening_energy(threshold) * level.T).astype(np.float32)
    chosen = second_rows(plan)
    gaps = (gap_sigmas * plan.sigma_t * plan.coarse / plan.length_s).astype(np.int64)
    for row, part, x, maxima in _rows(spectra, plan):
        low, high = lows[row, part], highs[row, part]
        weights, normal = midpoint_weights(), level[part, row]
        fixed = x, maxima, low, high, bounds[row, part], screens[row, part], weights
        runs.add(find_runs, fixed, row, part.start, normal, columns=(4, 4))
        if bright is None or not chosen[row]:
            continue
        least = (bright * normal).astype(np.float32)
        fixed = x, maxima, (low + 1) // 2, (high + 1) // 2, least, gaps[row]
        lit.add(find_bright, fixed, row, part.start, normal, columns=(5, 2))
    if runs.places:
        place, row, energy = runs.joined()
        found = TileRuns(place[:, 0], row, *place[:, 1:].T, *energy.T.astype(float))
    else:
        none = np.zeros(0, dtype=np.int64)
        found = TileRuns(none, none, none, none, none, *(np.zeros(0),) * 4)
    return found, BrightRuns.of(*lit.joined()) if lit.places else BrightRuns.none()


def _rows(spectra: np.ndarray, plan: TilePlan):
    """Yield each row, the items in it, their coarse coefficients and their maxima."""
    chunks = np.clip(_ROW_LIMIT // plan.coarse, 1, len(spectra))
    # fresh memory for every row would cost more in page faults than the transform
    work = np.empty(int(np.max(chunks * plan.coarse)), dtype=np.complex64)
    maxima = np.empty(int(np.max(chunks * (plan.coarse // CHUNK + 1))), np.float32)
    for row, chunk in enumerate(chunks):
        width = int(plan.coarse[row]) // CHUNK + 1
        for item in range(0, len(spectra), chunk):
            part = slice(item, item + chunk)
            x = _transform(spectra[part], plan, row, int(plan.coarse[row]), work)
            x = x.view(np.float32)
            peaks = maxima[: len(x) * width].reshape(len(x), width)
            chunk_maxima(x, peaks)
            yield row, part, x, peaks


class _Gathered:
    """What a kernel found in the rows so far."""

    def __init__(self):
        self.places, self.rows, self.energies = [], [], []
        self.capacity = 1024

    def add(self, kernel, fixed, row: int, item: int, level, *, columns) -> None:
        """Run a kernel over a row, again with more room where it found more."""
        while True:
            places = np.empty((self.capacity, columns[0]), dtype=np.int64)
            energies = np.empty((self.capacity, columns[1]), dtype=np.float32)
            found = kernel(*fixed, places, energies)
            if found <= self.capacity:
                break
            self.capacity = 2 * found
        if found:
            places, energies = places[:found].copy(), energies[:found]
            self.energies.append(energies / level[places[:, 0]][:, None])
            places[:, 0] += item
            self.places.append(places)
            self.rows.append(np.full(found, row))

    def joined(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Give places, rows and normalised energies of all."""
        parts = self.places, self.rows, self.energies
        return tuple(np.concatenate(part) for part in parts)


def _tile_range(plan: TilePlan, seconds) -> np.ndarray:
    """Give each row's first tile at or after a time, shape (n_rows, n_items)."""
    spacing = plan.length_s / plan.tiles[:, None]
    first = np.ceil(np.asarray(seconds)[None, :] / spacing - 1e-9).astype(np.int64)
    return np.clip(first, 0, plan.tiles[:, None])
