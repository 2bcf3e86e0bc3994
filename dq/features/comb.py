"""Mains combs: power at the fundamental and its harmonics against power between."""

from __future__ import annotations

import numpy as np

from dq.features.grouped import ratio
from dq.features.scene import Scene
from dq.features.spec import group_of

#: Harmonics looked at, and the half-width of a tooth in Hz: what a burst of 0.1 s
#: spreads.
TEETH = 12
TOOTH_HALF_HZ = 5.0

#: Weak teeth are looked for this far beyond 5 and 95 % of the energy, octaves.
SLACK_OCTAVES = 1.5

FEATURES = group_of(
    "comb",
    ("comb_strength", "1", "share of the in-band power at the mains harmonics"),
    ("comb_contrast", "1", "(teeth - gaps) / (teeth + gaps), densities"),
    ("comb_teeth", "1", "harmonics above a tenth of the strongest"),
    ("comb_fundamental", "1", "share of the teeth's power at the fundamental"),
    ("comb_odd", "1", "share of the teeth's power at odd harmonics"),
)


def measure_comb(scene: Scene, *, mains_hz: float) -> dict[str, np.ndarray]:
    """Measure the group; see ``FEATURES``.

    Parameters
    ----------
    scene : Scene
    mains_hz : float
        Fundamental of the mains, 50 or 60 Hz.
    """
    step = 1.0 / scene.length_s
    bins = min(int((TEETH + 0.5) * mains_hz / step), scene.excess.shape[1])
    f = np.arange(bins) * step
    number = np.rint(f / mains_hz).astype(int)
    distance = np.abs(f - number * mains_hz)
    on = (distance <= TOOTH_HALF_HZ) & (number >= 1) & (number <= TEETH)
    off = (np.abs(distance - 0.5 * mains_hz) <= TOOTH_HALF_HZ) & (f > TOOTH_HALF_HZ)
    low = np.exp2(scene.octaves[:, :1] - SLACK_OCTAVES)
    high = np.exp2(scene.octaves[:, -1:] + SLACK_OCTAVES)
    inside = (f >= low) & (f <= high)
    excess = np.where(inside, scene.excess[:, :bins], 0.0).astype(np.float64)
    ceiling = int(np.ceil(high.max() / step)) + 1
    f_all = np.arange(scene.excess.shape[1])[:ceiling] * step
    band = (f_all >= low) & (f_all <= high)
    whole = np.where(band, scene.excess[:, :ceiling], 0.0)
    whole = whole.sum(axis=1, dtype=np.float64)
    teeth = np.zeros((scene.count, TEETH))
    for k in range(TEETH):
        teeth[:, k] = excess[:, on & (number == k + 1)].sum(axis=1)
    teeth = np.maximum(teeth, 0.0)
    sums = teeth.sum(axis=1)
    gaps = np.maximum(excess[:, off].sum(axis=1), 0.0)
    density_on = ratio(sums, (inside * on).sum(axis=1).astype(float))
    density_off = ratio(gaps, (inside * off).sum(axis=1).astype(float))
    floor = np.maximum(0.1 * teeth.max(axis=1), 6.0)[:, None]
    return {
        "comb_strength": np.clip(ratio(sums, np.maximum(whole, 1.0)), 0.0, 1.0),
        "comb_contrast": ratio(density_on - density_off, density_on + density_off),
        "comb_teeth": (teeth >= floor).sum(axis=1).astype(float),
        "comb_fundamental": ratio(teeth[:, 0], sums),
        "comb_odd": ratio(teeth[:, ::2].sum(axis=1), sums),
    }
