"""How a transient moves through frequency: sweeps, arches, chirps.

A line or a parabola is fitted to log2 of the frequency against time by least squares,
each tile weighted with its energy; time is counted from the median in units of half
the duration, so that coefficients are octaves from the middle to an end.
"""

from __future__ import annotations

import numpy as np

from dq.chirp import SOLAR_MASS_S
from dq.features.grouped import line_fit, moments, parabola_fit, ratio, total
from dq.features.scene import Scene
from dq.features.spec import group_of

#: Largest chirp mass that is told apart, solar masses: beyond lies no inspiral in band.
MASS_LIMIT = 500.0

MIRROR_BINS = 8

FEATURES = group_of(
    "ridge",
    ("ridge_slope_octaves_s", "octave/s", "slope of the line"),
    ("ridge_slope_hz_s", "Hz/s", "slope of the line fitted to the frequency"),
    (
        "sweep_octaves",
        "octave",
        "slope of the parabola in the middle",
    ),
    ("bend_octaves", "octave", "bend of the parabola; below 0 for an arch"),
    ("line_fit", "1", "correlation of log2 frequency with time"),
    ("bent_fit", "1", "share of the variance that the parabola explains"),
    ("ridge_width_octaves", "octave", "scatter around the parabola"),
    ("time_symmetry", "1", "energy in common with the map reversed in time"),
    (
        "chirp_fit",
        "1",
        "minus the correlation of f^(-8/3) with time: 1 for an inspiral",
        "Peters & Mathews 1963",
    ),
    (
        "chirp_mass_sun",
        "solar mass",
        "chirp mass of the fitted inspiral; 0 where frequency does not rise",
        "Peters & Mathews 1963; Maggiore 2008",
    ),
    ("late_rise_octaves", "octave", "mean log2 f of the last quarter less the first's"),
    ("middle_rise_octaves", "octave", "mean log2 f of the middle half less the ends'"),
)


def measure_ridge(scene: Scene) -> dict[str, np.ndarray]:
    """Measure the group; see ``FEATURES``."""
    tiles, n = scene.tiles, scene.count
    item, weight = tiles.item, tiles.weight
    octave = np.log2(tiles.frequency)
    half = np.maximum(0.5 * (scene.times[:, 4] - scene.times[:, 0]), 1e-4)
    u = np.clip((tiles.time - scene.times[item, 2]) / half[item], -3.0, 3.0)
    slope, correlation = line_fit(item, tiles.time, octave, weight, n)
    slope_hz, _ = line_fit(item, tiles.time, tiles.frequency, weight, n)
    sweep, bend, explained = parabola_fit(item, u, octave, weight, n)
    _, spread, _, _ = moments(item, octave, weight, n)
    quarter = (tiles.time[:, None] > scene.times[item, 1:4]).sum(axis=1)
    sums = [total(item, weight * (quarter == k), n) for k in range(4)]
    tops = [total(item, weight * octave * (quarter == k), n) for k in range(4)]
    first, last = (ratio(tops[k], sums[k]) for k in (0, 3))
    middle = ratio(tops[1] + tops[2], sums[1] + sums[2])
    ends = ratio(tops[0] + tops[3], sums[0] + sums[3])
    both = (sums[0] > 0) & (sums[3] > 0)
    inner = (sums[1] + sums[2] > 0) & (sums[0] + sums[3] > 0)
    return {
        "ridge_slope_octaves_s": slope,
        "ridge_slope_hz_s": slope_hz,
        "sweep_octaves": sweep,
        "bend_octaves": bend,
        "line_fit": correlation,
        "bent_fit": explained,
        "ridge_width_octaves": spread * np.sqrt(1.0 - explained),
        "time_symmetry": _symmetry(scene),
        **_chirp(scene),
        "late_rise_octaves": np.where(both, last - first, 0.0),
        "middle_rise_octaves": np.where(inner, middle - ends, 0.0),
    }


def _chirp(scene: Scene) -> dict[str, np.ndarray]:
    """Fit the leading-order inspiral, f^(-8/3) = K (t_c - t)."""
    tiles, n = scene.tiles, scene.count
    scale = np.exp2(scene.octaves[:, 2])
    z = (tiles.frequency / scale[tiles.item]) ** (-8.0 / 3.0)
    slope, correlation = line_fit(tiles.item, tiles.time, z, tiles.weight, n)
    rate = np.maximum(-slope, 0.0) * scale ** (-8.0 / 3.0)
    # K = (256 / 5) pi^(8/3) (G M_c / c^3)^(5/3)
    mass = (rate * 5.0 / 256.0 / np.pi ** (8.0 / 3.0)) ** 0.6 / SOLAR_MASS_S
    return {"chirp_fit": -correlation, "chirp_mass_sun": np.minimum(mass, MASS_LIMIT)}


def _symmetry(scene: Scene) -> np.ndarray:
    """Compare the map with itself reversed about the middle of its duration."""
    line = np.clip(np.log2(scene.tiles.frequency).astype(int), 0, 15)
    grid = scene.grid(MIRROR_BINS, line, 16)
    common = np.minimum(grid, grid[:, :, ::-1]).sum(axis=(1, 2))
    return common / grid.sum(axis=(1, 2))
