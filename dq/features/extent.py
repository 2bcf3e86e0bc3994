"""How long and how wide a transient is.

Durations and bandwidths lie between shares of the energy (quantiles), which the
threshold and the noise hardly move.
"""

from __future__ import annotations

import numpy as np

from dq.features.grouped import ratio
from dq.features.scene import Scene
from dq.features.spec import group_of

FEATURES = group_of(
    "extent",
    ("duration_s", "s", "time between 5 and 95 % of the energy"),
    ("core_duration_s", "s", "time between 25 and 75 % of the energy"),
    ("bandwidth_octaves", "octave", "band between 5 and 95 % of the energy"),
    ("core_bandwidth_octaves", "octave", "band between 25 and 75 % of the energy"),
    ("bandwidth_hz", "Hz", "band between 5 and 95 % of the energy"),
    (
        "time_bandwidth",
        "1",
        "duration times bandwidth; about 1 for a burst of few cycles",
        "Gabor 1946",
    ),
    ("duration_cycles", "1", "duration in periods of the median frequency"),
    ("fill", "1", "share of that rectangle which loud tiles cover, in the mean plane"),
)


def measure_extent(scene: Scene) -> dict[str, np.ndarray]:
    """Measure the group; see ``FEATURES``."""
    t, o = scene.times, scene.octaves
    duration, octaves = t[:, 4] - t[:, 0], o[:, 4] - o[:, 0]
    band = np.exp2(o[:, 4]) - np.exp2(o[:, 0])
    tiles = scene.tiles
    area = tiles.weight / np.maximum(tiles.energy - 1.0, 0.1)
    # a single tile has the extent 1 / (4 pi) in each product of standard deviations
    box = np.maximum(duration, 1e-4) * np.maximum(band, 1.0)
    return {
        "duration_s": duration,
        "core_duration_s": t[:, 3] - t[:, 1],
        "bandwidth_octaves": octaves,
        "core_bandwidth_octaves": o[:, 3] - o[:, 1],
        "bandwidth_hz": band,
        "time_bandwidth": duration * band,
        "duration_cycles": duration * np.exp2(o[:, 2]),
        "fill": np.minimum(ratio(scene.total(area), box), 4.0),
    }
