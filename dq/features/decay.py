"""How a transient rises and falls, and the Q of its decay.

A ringdown falls as exp(-pi f t / Q), so the energy of its row falls as
exp(-2 t / tau) with tau = Q / (pi f); a tile's Gaussian smearing keeps that slope
beyond about one sigma_t after the peak, and there it is fitted.
"""

from __future__ import annotations

import numpy as np

from dq.features.grouped import line_fit, ratio
from dq.features.scene import Scene
from dq.features.spec import group_of

#: Largest decay Q that is told apart.
Q_LIMIT = 5000.0

FEATURES = group_of(
    "decay",
    ("rise_s", "s", "from 5 % of the energy to the loudest tile"),
    ("fall_s", "s", "from the loudest tile to 95 % of the energy"),
    ("front_share", "1", "share of the duration before half of the energy has passed"),
    ("core_front_share", "1", "the same between the quarters of the energy"),
    ("peak_place", "1", "place of the loudest tile within the duration, 0 to 1"),
    ("decay_s", "s", "amplitude e-fold time after the peak; 0 where it does not fall"),
    (
        "decay_q",
        "1",
        "pi f times the e-fold time; 0 where the energy does not fall",
        "ringdown h ~ exp(-pi f t / Q), textbook",
    ),
    ("attack_q", "1", "the same Q fitted to the rise before the peak"),
    ("decay_balance", "1", "(decay - attack) / (decay + attack), e-fold times"),
)


def measure_decay(scene: Scene) -> dict[str, np.ndarray]:
    """Measure the group; see ``FEATURES``."""
    tiles, t = scene.tiles, scene.times
    duration = t[:, 4] - t[:, 0]
    peak = tiles.time[scene.peak]
    frequency = tiles.frequency[scene.peak]
    after, before = _slope(scene, after=True), _slope(scene, after=False)
    # energy falls as exp(-2 t / tau)
    tau = np.minimum(2.0 * ratio(np.ones(len(after)), -after), _longest(frequency))
    attack = np.minimum(2.0 * ratio(np.ones(len(before)), before), _longest(frequency))
    return {
        "rise_s": np.maximum(peak - t[:, 0], 0.0),
        "fall_s": np.maximum(t[:, 4] - peak, 0.0),
        "front_share": ratio(t[:, 2] - t[:, 0], duration, 0.5),
        "core_front_share": ratio(t[:, 2] - t[:, 1], t[:, 3] - t[:, 1], 0.5),
        "peak_place": np.clip(ratio(peak - t[:, 0], duration, 0.5), 0.0, 1.0),
        "decay_s": tau,
        "decay_q": np.pi * frequency * tau,
        "attack_q": np.pi * frequency * attack,
        "decay_balance": ratio(tau - attack, tau + attack),
    }


def _longest(frequency: np.ndarray) -> np.ndarray:
    return Q_LIMIT / (np.pi * frequency)


def _slope(scene: Scene, *, after: bool):
    """Fit ln energy against time in the loudest tile's row, on one side of the peak."""
    tiles = scene.tiles
    top = scene.peak[tiles.item]
    offset = tiles.time - tiles.time[top]
    offset = offset if after else -offset
    same = (tiles.frequency == tiles.frequency[top]) & (tiles.plane == tiles.plane[top])
    used = same & (offset >= 0.8 * tiles.sigma_t)
    slope, _ = line_fit(
        tiles.item[used],
        tiles.time[used],
        np.log(tiles.energy[used]),
        tiles.energy[used],
        scene.count,
    )
    return slope
