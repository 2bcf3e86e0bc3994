"""Blobs of the map, polarity and cycles of the samples, saturation."""

from __future__ import annotations

import numpy as np
from scipy.ndimage import label, sum_labels

from dq.features.grouped import ratio, total
from dq.features.scene import Scene
from dq.features.spec import group_of

#: Grid on which blobs are parted: its time bins share the duration, its frequency bins
#: are wider than the map's rows are apart.
BLOB_COLUMNS = 32
BLOB_OCTAVES = 0.3
BLOB_LINES = 48

#: A blob counts from this share of the transient's energy on.
BLOB_SHARE = 0.05

FEATURES = group_of(
    "shape",
    ("blob_count", "1", "separate parts of the map with 5 % of the energy"),
    ("largest_blob", "1", "share of these parts' energy in the largest one"),
    ("polarity", "1", "(highest + lowest) / (highest - lowest) sample"),
    ("step", "1", "largest running sum over the sum of moduli: few half-waves, large"),
    ("crest", "1", "largest modulus over the root mean square of the core"),
    ("half_cycles", "1", "sign changes where the envelope exceeds half its peak"),
    ("flat_share", "1", "share of the transient in repeating samples (saturation)"),
    ("flat_s", "s", "time in repeating samples (saturation)"),
)


def measure_shape(scene: Scene) -> dict[str, np.ndarray]:
    """Measure the group; see ``FEATURES``."""
    return {
        **_blobs(scene),
        **_samples(scene),
        "flat_share": np.clip(ratio(scene.flat_s, scene.extent_s), 0.0, 1.0),
        "flat_s": scene.flat_s,
    }


def _blobs(scene: Scene) -> dict[str, np.ndarray]:
    tiles, n = scene.tiles, scene.count
    # each tile covers its standard deviations on both sides, so that gaps between
    # neighbouring tiles and rows close
    first, last = scene.columns(BLOB_COLUMNS)
    sigma_f = 1.0 / (4.0 * np.pi * tiles.sigma_t)
    shape = (n, BLOB_LINES, BLOB_COLUMNS + 1)
    cover = np.zeros(np.prod(shape))
    for offset in (-1.0, 0.0, 1.0):
        row = tiles.item * BLOB_LINES + _line(tiles.frequency + offset * sigma_f)
        cover += total(row * shape[2] + first, np.ones(len(row)), len(cover))
        cover -= total(row * shape[2] + last + 1, np.ones(len(row)), len(cover))
    filled = np.cumsum(cover.reshape(shape), axis=2)[:, :, :-1] > 0.5
    row = tiles.item * BLOB_LINES + _line(tiles.frequency)
    middle = row * shape[2] + (first + last) // 2
    energy = total(middle, tiles.weight, len(cover)).reshape(shape)
    # parts touch in time, frequency or across a corner, never between transients
    touch = np.zeros((3, 3, 3), dtype=bool)
    touch[1] = True
    labels, parts = label(filled, structure=touch)
    sums = sum_labels(energy[:, :, :-1], labels, np.arange(1, parts + 1))
    at = np.flatnonzero(filled)
    owner = np.zeros(parts, dtype=int)
    owner[labels.ravel()[at] - 1] = at // (BLOB_LINES * BLOB_COLUMNS)
    share = sums / scene.total(tiles.weight)[owner]
    # what is no blob of its own does not count: one blob holds all
    counts = share >= BLOB_SHARE
    largest = np.zeros(n)
    np.maximum.at(largest, owner, share)
    return {
        "blob_count": total(owner, counts.astype(float), n),
        "largest_blob": ratio(largest, total(owner, share * counts, n)),
    }


def _line(frequency: np.ndarray) -> np.ndarray:
    line = np.log2(np.maximum(frequency, 1.0)) / BLOB_OCTAVES
    return np.clip(line.astype(int), 0, BLOB_LINES - 1)


def _samples(scene: Scene) -> dict[str, np.ndarray]:
    rate, samples = scene.sample_rate, scene.samples
    low = np.floor((scene.times[:, 0] - 0.01) * rate).astype(int)
    high = np.ceil((scene.times[:, 4] + 0.01) * rate).astype(int)
    a, b = max(int(low.min()), 0), min(int(high.max()) + 1, samples.shape[1])
    x = samples[:, a:b]
    column = np.arange(a, b)
    core = (column >= low[:, None]) & (column <= high[:, None])
    x = np.where(core, x, 0.0)
    top, bottom = x.max(axis=1), x.min(axis=1)
    modulus = np.abs(x)
    running = np.cumsum(x, axis=1, dtype=np.float64)
    length = np.maximum(core.sum(axis=1), 1)
    rms = np.sqrt(np.square(x).sum(axis=1, dtype=np.float64) / length)
    loudest = modulus.max(axis=1)
    return {
        "polarity": ratio(top + bottom, top - bottom),
        "step": ratio(
            np.abs(running).max(axis=1), modulus.sum(axis=1, dtype=np.float64)
        ),
        "crest": ratio(loudest, rms),
        "half_cycles": _half_cycles(x, modulus, loudest),
    }


def _half_cycles(x, modulus, loudest) -> np.ndarray:
    """Count the half-waves whose crest exceeds half of the largest."""
    strong = modulus >= 0.5 * loudest[:, None]
    row, column = np.nonzero(strong)
    sign = x[row, column] > 0
    new = np.ones(len(row))
    if len(row) > 1:
        new[1:] = (row[1:] != row[:-1]) | (sign[1:] != sign[:-1])
    return total(row, new, len(x))
