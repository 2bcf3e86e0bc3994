"""The guard of real signals: the reserved family ``chirp_like``.

A transient that sweeps up like a compact binary is never noise. The family is trained
from simulated leading-order chirps (``dq.chirp``) even where no analyst labelled one.
That neither it nor ``unknown`` becomes a veto's target is ``dq.config.NEVER_VETOED``.
"""

from __future__ import annotations

import numpy as np

#: The reserved family of transients that sweep up like a compact-binary signal.
CHIRP_LIKE = "chirp_like"

#: What the sorter says when it declines.
UNKNOWN = "unknown"

#: What a transient is called where no model was given.
UNSORTED = "unsorted"

#: Names that no label may use: they are answers of the tool, not families.
RESERVED = (UNKNOWN, UNSORTED)

#: Solar masses of each body that the guard trains on and is measured on.
MASS_RANGE = (5.0, 60.0)


def draw_chirps(
    count: int,
    *,
    rng: np.random.Generator,
    mass_range: tuple[float, float] = MASS_RANGE,
) -> list[tuple[float, float, float]]:
    """Draw masses (solar, logarithmically uniform) and phases of simulated chirps.

    Returns
    -------
    list of (mass_1, mass_2, phase)
    """
    low, high = np.log(mass_range)
    masses = np.exp(rng.uniform(low, high, (count, 2)))
    phases = rng.uniform(0.0, 2.0 * np.pi, count)
    return [
        (float(a), float(b), float(p)) for (a, b), p in zip(masses, phases, strict=True)
    ]
