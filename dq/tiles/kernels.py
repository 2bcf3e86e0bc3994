"""Compiled inner loops: one pass over a row's coefficients, no tile visited twice.

The slow twins of these loops are in ``tests/tiles``.
"""

from __future__ import annotations

import numpy as np
from numba import njit

#: Coefficients looked at together; a chunk without a tile worth a closer look (eleven
#: of twelve in noise) costs only its share of one vectorised pass.
CHUNK = 16


@njit(cache=True, fastmath=True, nogil=True)
def fill_window(start, step, scale, out):
    """Fill ``out`` with scale (1 - x^2)^2 at x = start, start + step, ...; |x| < 1."""
    for k in range(out.shape[0]):
        x = start + step * k
        rest = max(1.0 - x * x, 0.0)
        out[k] = scale * rest * rest


@njit(cache=True, fastmath=True, nogil=True)
def apply_window(spectra, first, window, out):
    """Put a row's part of each spectrum under its window, its middle at zero frequency.

    Parameters
    ----------
    spectra : ndarray of float32, shape (n_items, 2 * n_bins)
        Real and imaginary parts in turn.
    first : int
        First bin of the window.
    window : ndarray of float32, shape (width,)
    out : ndarray of float32, shape (n_items, 2 * n_tiles)
        Zero between the two halves of the window.
    """
    width = window.shape[0]
    middle = width // 2
    tail = out.shape[1] - 2 * middle
    for item in range(spectra.shape[0]):
        lower, upper = spectra[item, 2 * first :], spectra[item, 2 * (first + middle) :]
        end = out[item, tail:]
        for k in range(middle):
            end[2 * k] = lower[2 * k] * window[k]
            end[2 * k + 1] = lower[2 * k + 1] * window[k]
        start = out[item]
        for k in range(width - middle):
            start[2 * k] = upper[2 * k] * window[middle + k]
            start[2 * k + 1] = upper[2 * k + 1] * window[middle + k]
        out[item, 2 * (width - middle) : tail] = 0.0


@njit(cache=True, fastmath=True, nogil=True)
def chunk_maxima(x, maxima):
    """Find the largest squared modulus of each chunk; reassociation is harmless here.

    Parameters
    ----------
    x : ndarray of float32, shape (n_items, 2 * n_coarse)
        Coarse coefficients, real and imaginary parts in turn.
    maxima : ndarray of float32, shape (n_items, at least ceil(n_coarse / CHUNK))
        Out.
    """
    n_coarse = x.shape[1] // 2
    whole = n_coarse // CHUNK
    for item in range(x.shape[0]):
        row = x[item]
        for chunk in range(whole):
            part = row[2 * CHUNK * chunk : 2 * CHUNK * (chunk + 1)]
            largest = np.float32(0.0)
            for k in range(CHUNK):
                energy = part[2 * k] * part[2 * k] + part[2 * k + 1] * part[2 * k + 1]
                largest = max(largest, energy)
            maxima[item, chunk] = largest
        if whole * CHUNK < n_coarse:
            largest = np.float32(0.0)
            for k in range(whole * CHUNK, n_coarse):
                largest = max(largest, row[2 * k] ** 2 + row[2 * k + 1] ** 2)
            maxima[item, whole] = largest


@njit(cache=True, nogil=True)
def _energy(x: np.ndarray, k: int) -> np.float32:
    return x[2 * k] * x[2 * k] + x[2 * k + 1] * x[2 * k + 1]


@njit(cache=True, nogil=True)
def _midpoint(x: np.ndarray, k: int, weights: np.ndarray) -> np.float32:
    """Energy half-way between tiles ``k`` and ``k + 1`` of a periodic row."""
    n_tiles = x.shape[0] // 2
    reach = weights.shape[0] // 2
    real, imaginary = np.float32(0.0), np.float32(0.0)
    for j in range(weights.shape[0]):
        at = (k - reach + 1 + j) % n_tiles
        real += weights[j] * x[2 * at]
        imaginary += weights[j] * x[2 * at + 1]
    return real * real + imaginary * imaginary


@njit(cache=True, nogil=True)
def _fine_energy(x: np.ndarray, fine: int, weights: np.ndarray) -> np.float32:
    """Energy of a fine tile: even ones are coarse, odd ones lie half-way."""
    n_tiles = x.shape[0] // 2
    k = (fine // 2) % n_tiles
    if fine % 2:
        return _midpoint(x, k, weights)
    return _energy(x, k)


@njit(cache=True, nogil=True)
def _put(places, energies, at, run, sums, row, weights):
    """Store one run where there is room: its item, first, last, peak and energies."""
    if at >= places.shape[0]:
        return
    for i in range(4):
        places[at, i] = run[i]
    energies[at, 0], energies[at, 3] = sums
    energies[at, 1] = _fine_energy(row, run[3] - 1, weights)
    energies[at, 2] = _fine_energy(row, run[3] + 1, weights)


@njit(cache=True, nogil=True)
def _runs_in_row(row, peaks, item, within, bounds, weights, places, energies, found):
    """Find the runs of one item; see :func:`find_runs`. Gives the new number found."""
    n_coarse = row.shape[0] // 2
    low, high = within
    bound, screen = bounds
    run = (item, 0, 0, 0)
    loudest, total = np.float32(0.0), np.float32(0.0)
    open_run = False
    start, end = low // 2, (high + 1) // 2
    while start < end:
        chunk = start // CHUNK
        stop = min((chunk + 1) * CHUNK, end)
        # the tile after the chunk decides about the mid-point before it
        after = _energy(row, stop if stop < n_coarse else 0)
        if not open_run and max(peaks[chunk], after) < screen:
            start = stop
            continue
        energy = _energy(row, start)
        for k in range(start, stop):
            following = _energy(row, k + 1) if k + 1 < stop else after
            between = np.float32(0.0)
            if energy >= screen or following >= screen:
                between = _midpoint(row, k, weights)
            for fine in range(2 * k, 2 * k + 2):
                value = between if fine % 2 else energy
                if value >= bound and low <= fine < high:
                    if not open_run:
                        open_run, run = True, (item, fine, fine, fine)
                        loudest, total = value, np.float32(0.0)
                    total += value
                    peak = fine if value > loudest else run[3]
                    loudest = max(loudest, value)
                    run = (item, run[1], fine, peak)
                elif open_run:
                    open_run = False
                    _put(places, energies, found, run, (loudest, total), row, weights)
                    found += 1
            energy = following
        start = stop
    if open_run:
        _put(places, energies, found, run, (loudest, total), row, weights)
        found += 1
    return found


@njit(cache=True, nogil=True)
def find_runs(x, maxima, low, high, threshold, screening, weights, places, energies):
    """Find runs of consecutive fine tiles above threshold in one row of each item.

    Parameters
    ----------
    x : ndarray of float32, shape (n_items, 2 * n_coarse)
        Coarse coefficients, real and imaginary parts in turn.
    maxima : ndarray of float32
        Of :func:`chunk_maxima`.
    low, high : ndarray of int64, shape (n_items,)
        Fine tiles ``[low, high)`` of each item are looked at.
    threshold, screening : ndarray of float32, shape (n_items,)
        Squared modulus from which on a tile counts, and from which on a coarse tile
        has the tiles on either side computed.
    weights : ndarray of float32
        Of the interpolation (``midpoints``).
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
    found = 0
    for item in range(x.shape[0]):
        found = _runs_in_row(
            x[item],
            maxima[item],
            item,
            (low[item], high[item]),
            (threshold[item], min(screening[item], threshold[item])),
            weights,
            places,
            energies,
            found,
        )
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
    # the phase is taken relative to the tile's own frequency: it is the signal's phase
    # carried back to the transform's first sample
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
