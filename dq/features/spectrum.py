"""Where in frequency a transient lies, and whether it is made of lines."""

from __future__ import annotations

import numpy as np

from dq.features.energy import OCTAVE_BIN, OCTAVE_BINS
from dq.features.grouped import entropy, moments, ratio, total
from dq.features.scene import Scene
from dq.features.spec import group_of

#: Half-width of a line, Hz, and of the smoothing before modes are counted.
LINE_HALF_HZ = 2.0
SMOOTH_HALF_HZ = 3.0

#: A mode stands above this share of the strongest, and above the noise by this much of
#: its mean; a bin counts as occupied likewise (own choice: a tenth is 10 dB down).
MODE_SHARE, MODE_FLOOR = 0.2, 3.0
LOUD_SHARE, LOUD_FLOOR = 0.1, 2.0

FEATURES = group_of(
    "spectrum",
    ("peak_frequency_hz", "Hz", "frequency of the loudest tile"),
    ("centroid_hz", "Hz", "energy-weighted geometric mean frequency"),
    ("low_frequency_hz", "Hz", "5 % of the energy lie below"),
    ("high_frequency_hz", "Hz", "95 % of the energy lie below"),
    ("spectral_spread", "octave", "standard deviation of the energy over log2 f"),
    ("spectral_skewness", "1", "skewness of the energy over log2 f"),
    ("spectral_kurtosis", "1", "excess kurtosis of the energy over log2 f"),
    ("spectral_entropy", "1", "entropy over third-octave bins", "Shannon 1948"),
    ("band_balance", "1", "(high - low) / all, energy beside the middle of the band"),
    ("low_share", "1", "share of the energy below 100 Hz"),
    ("line_frequency_hz", "Hz", "frequency of the strongest bin of the line spectrum"),
    ("line_share", "1", "share of the in-band power within 2 Hz of one frequency"),
    ("occupied_hz", "Hz", "width that the in-band power would fill evenly"),
    ("mode_count", "1", "separate maxima of the smoothed line spectrum"),
)


def measure_spectrum(scene: Scene) -> dict[str, np.ndarray]:
    """Measure the group; see ``FEATURES``."""
    tiles, n = scene.tiles, scene.count
    octave = np.log2(tiles.frequency)
    mean, spread, skewness, kurtosis = moments(tiles.item, octave, tiles.weight, n)
    line = np.clip((octave / OCTAVE_BIN).astype(int), 0, OCTAVE_BINS - 1)
    shares = total(tiles.item * OCTAVE_BINS + line, tiles.weight, n * OCTAVE_BINS)
    peak = tiles.frequency[scene.peak]
    energy = scene.total(tiles.weight)
    middle = 0.5 * (scene.octaves[:, 0] + scene.octaves[:, -1])
    # a soft step, so that no single tile at the middle decides
    width = np.maximum(0.25 * (scene.octaves[:, -1] - scene.octaves[:, 0]), 0.1)
    beside = np.tanh((octave - middle[tiles.item]) / width[tiles.item])
    return {
        "peak_frequency_hz": peak,
        "centroid_hz": np.exp2(mean),
        "low_frequency_hz": np.exp2(scene.octaves[:, 0]),
        "high_frequency_hz": np.exp2(scene.octaves[:, 4]),
        "spectral_spread": spread,
        "spectral_skewness": skewness,
        "spectral_kurtosis": kurtosis,
        "spectral_entropy": entropy(shares.reshape(n, OCTAVE_BINS)),
        "band_balance": scene.total(tiles.weight * beside) / energy,
        "low_share": scene.total(tiles.weight * (tiles.frequency < 100.0)) / energy,
        **_lines(scene),
    }


def _running(excess: np.ndarray, half: int) -> np.ndarray:
    """Sum over ``2 half + 1`` bins around each bin."""
    sums = np.cumsum(np.pad(excess, ((0, 0), (half + 1, half))), axis=1)
    return sums[:, 2 * half + 1 :] - sums[:, : -2 * half - 1]


def _lines(scene: Scene) -> dict[str, np.ndarray]:
    step = 1.0 / scene.length_s
    top = min(int(scene.high_hz.max() / step) + 2, scene.excess.shape[1])
    f = np.arange(top) * step
    inside = (f >= scene.low_hz[:, None]) & (f <= scene.high_hz[:, None])
    excess = np.where(inside, scene.excess[:, :top], 0.0).astype(np.float64)
    whole = np.maximum(excess.sum(axis=1), 1.0)
    line = _running(excess, round(LINE_HALF_HZ / step)).max(axis=1)
    half = round(SMOOTH_HALF_HZ / step)
    smooth = _running(excess, half) / (2 * half + 1)
    best = smooth.max(axis=1, keepdims=True)
    high = smooth >= np.maximum(MODE_SHARE * best, MODE_FLOOR)
    rising = smooth[:, 1:-1] > smooth[:, :-2]
    crest = rising & (smooth[:, 1:-1] >= smooth[:, 2:]) & high[:, 1:-1]
    floor = np.maximum(LOUD_SHARE * excess.max(axis=1), LOUD_FLOOR)
    loud = np.where(excess >= floor[:, None], excess, 0.0)
    filled = ratio(loud.sum(axis=1) ** 2, np.square(loud).sum(axis=1))
    return {
        "line_frequency_hz": f[excess.argmax(axis=1)],
        "line_share": np.clip(line / whole, 0.0, 1.0),
        "occupied_hz": filled * step,
        "mode_count": crest.sum(axis=1).astype(float),
    }
