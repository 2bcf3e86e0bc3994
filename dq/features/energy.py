"""How a transient's energy is spread over its map: moments and entropies."""

from __future__ import annotations

import numpy as np

from dq.features.grouped import entropy, moments, ratio
from dq.features.scene import Scene
from dq.features.spec import group_of

#: Bins of the transient's own duration for the entropy of its envelope.
TIME_BINS = 12

#: Width and number of the frequency bins, counted from 1 Hz: to 16 kHz.
OCTAVE_BIN = 0.35
OCTAVE_BINS = 40

FEATURES = group_of(
    "energy",
    ("time_skewness", "1", "skewness of the energy over time"),
    ("time_kurtosis", "1", "excess kurtosis of the energy over time"),
    (
        "time_entropy",
        "1",
        "entropy of the envelope, 1 when flat",
        "Shannon 1948",
    ),
    ("map_entropy", "1", "entropy over time and frequency bins", "Shannon 1948"),
    ("peak_share", "1", "share of the energy in tiles above half the peak"),
    ("effective_cells", "1", "number of tile areas that hold the energy"),
    ("q_balance", "1", "ln of the loudest energy at high Q over that at low Q"),
    ("q_middle", "1", "ln of the loudest energy at middle Q over the largest"),
)


def measure_energy(scene: Scene) -> dict[str, np.ndarray]:
    """Measure the group; see ``FEATURES``."""
    tiles, n = scene.tiles, scene.count
    line = (np.log2(tiles.frequency) / OCTAVE_BIN).astype(int)
    line = np.clip(line, 0, OCTAVE_BINS - 1)
    shares = scene.grid(TIME_BINS, line, OCTAVE_BINS)
    _, _, skewness, kurtosis = moments(tiles.item, tiles.time, tiles.weight, n)
    top = tiles.energy[scene.peak]
    energy = scene.total(tiles.weight)
    half = tiles.energy >= 0.5 * top[tiles.item]
    loudest = np.stack([_loudest(scene, plane) for plane in range(3)], axis=1)
    return {
        "time_skewness": skewness,
        "time_kurtosis": kurtosis,
        "time_entropy": entropy(shares.sum(axis=1)),
        "map_entropy": entropy(shares.reshape(n, -1)),
        "peak_share": ratio(scene.total(tiles.weight * half), energy),
        "effective_cells": energy / np.maximum(top - 1.0, 0.1),
        "q_balance": np.log(loudest[:, 2] / loudest[:, 0]),
        "q_middle": np.log(loudest[:, 1] / loudest.max(axis=1)),
    }


def _loudest(scene: Scene, plane: int) -> np.ndarray:
    """Give the loudest energy in one plane, at least a quarter of the peak."""
    tiles = scene.tiles
    out = np.maximum(0.2 * tiles.energy[scene.peak], 1e-9)
    inside = tiles.plane == plane
    np.maximum.at(out, tiles.item[inside], tiles.energy[inside])
    return out
