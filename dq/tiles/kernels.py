"""Compiled inner loops: one pass over a row's coefficients, no tile visited twice.

The slow twins of these loops are in ``tests/tiles``.
"""

from __future__ import annotations

import numpy as np
from numba import njit

#: Coefficients looked at together; a chunk without a tile above threshold (nearly all
#: of them in noise) costs only a vectorised maximum. 256 complex64 are 2 KiB.
CHUNK = 256


@njit(cache=True, fastmath=True, nogil=True)
def apply_window(spectra, first, window, out):
    """Put a row's part of each spectrum under its window, followed by zeros.

    Parameters
    ----------
    spectra : ndarray of float32, shape (n_items, 2 * n_bins)
        Real and imaginary parts in turn.
    first : int
        First bin of the window.
    window : ndarray of float32, shape (width,)
    out : ndarray of float32, shape (n_items, 2 * n_tiles)
    """
    width = window.shape[0]
    for item in range(spectra.shape[0]):
        source, target = spectra[item, 2 * first :], out[item]
        for k in range(width):
            target[2 * k] = source[2 * k] * window[k]
            target[2 * k + 1] = source[2 * k + 1] * window[k]
        target[2 * width :] = 0.0


@njit(cache=True, fastmath=True, nogil=True)
def _largest_energy(x: np.ndarray, start: int, stop: int) -> np.float32:
    """Largest squared modulus in ``[start, stop)``; reassociation is harmless here."""
    largest = np.float32(0.0)
    for k in range(start, stop):
        energy = x[2 * k] * x[2 * k] + x[2 * k + 1] * x[2 * k + 1]
        largest = max(largest, energy)
    return largest


@njit(cache=True, nogil=True)
def _energy(x: np.ndarray, k: int) -> np.float32:
    return x[2 * k] * x[2 * k] + x[2 * k + 1] * x[2 * k + 1]


@njit(cache=True, nogil=True)
def find_runs(x, low, high, threshold, places, energies):
    """Find runs of consecutive tiles above threshold in one row of each item.

    Parameters
    ----------
    x : ndarray of float32, shape (n_items, 2 * n_tiles)
        Complex coefficients, real and imaginary parts in turn.
    low, high : ndarray of int64, shape (n_items,)
        Tiles ``[low, high)`` of each item are looked at.
    threshold : ndarray of float32, shape (n_items,)
        Squared modulus from which on a tile counts.
    places : ndarray of int64, shape (capacity, 4)
        Out: item, first tile, last tile, loudest tile of each run.
    energies : ndarray of float32, shape (capacity, 4)
        Out: squared modulus at the loudest tile, at the tile before and after it, and
        the sum over the run.

    Returns
    -------
    int
        Number of runs found; when it exceeds the capacity the rest was not stored and
        the caller must come again with more room.
    """
    capacity = places.shape[0]
    found = 0
    for item in range(x.shape[0]):
        row = x[item]
        n_tiles = row.shape[0] // 2
        bound = threshold[item]
        open_run = False
        first, peak = 0, 0
        loudest, total = np.float32(0.0), np.float32(0.0)
        start = low[item]
        while start < high[item]:
            stop = min(start + CHUNK, high[item])
            if open_run or _largest_energy(row, start, stop) >= bound:
                for k in range(start, stop + 1):
                    # one step past the last chunk closes a run at the border
                    inside = k < stop
                    if not inside and stop < high[item]:
                        break
                    energy = _energy(row, k) if inside else np.float32(-1.0)
                    if energy >= bound:
                        if not open_run:
                            open_run, first, peak = True, k, k
                            loudest, total = energy, np.float32(0.0)
                        total += energy
                        if energy > loudest:
                            loudest, peak = energy, k
                    elif open_run:
                        open_run = False
                        if found < capacity:
                            places[found, 0] = item
                            places[found, 1] = first
                            places[found, 2] = k - 1
                            places[found, 3] = peak
                            energies[found, 0] = loudest
                            energies[found, 1] = _energy(row, (peak - 1) % n_tiles)
                            energies[found, 2] = _energy(row, (peak + 1) % n_tiles)
                            energies[found, 3] = total
                        found += 1
            start = stop
    return found


@njit(cache=True, nogil=True)
def single_tile(spectrum, samples, sample_rate, time_s, frequency, q):
    """Evaluate one tile anywhere, by direct summation over its window's bins.

    Parameters
    ----------
    spectrum : ndarray of complex64, shape (n_bins,)
        Whitened spectrum of one transform of ``samples`` samples.
    time_s : float
        Centre of the tile after the transform's first sample, s.
    frequency, q : float
        Hz and dimensionless.

    Returns
    -------
    complex
        Coefficient whose squared modulus has mean 1 in white noise.
    """
    length = samples / sample_rate
    half_width = np.sqrt(11.0) * frequency / q
    first = max(int(np.floor((frequency - half_width) * length)) + 1, 1)
    last = min(int(np.ceil((frequency + half_width) * length)), spectrum.shape[0])
    step = 2.0 * np.pi * time_s / length
    turn = complex(np.cos(step), np.sin(step))
    # the phase is taken relative to the tile's own frequency, so that it is the
    # signal's phase at the centre of the tile
    phase = step * (first - frequency * length)
    factor = complex(np.cos(phase), np.sin(phase))
    total, norm = 0.0j, 0.0
    for k in range(first, last):
        offset = (k / length - frequency) / half_width
        weight = (1.0 - offset * offset) ** 2
        norm += weight * weight
        total += weight * factor * complex(spectrum[k])
        factor *= turn
    if norm == 0.0:
        return 0.0j
    return total / np.sqrt(norm)
