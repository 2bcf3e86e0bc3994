"""Slow motion: witnesses that no transient finder sees.

Scattered light is driven by motion at 0.1 to 5 Hz. Three kinds of *derived channels*
turn it into tables that the witness statistics read like any other channel's:

- ``CHANNEL@rms-LOW-HIGHHz``: level in an octave band over its running median,
- ``CHANNEL@fringe-nN``: predicted fringe frequency 2 n |v| / lambda (Accadia et al.
  2010, Class. Quantum Grav. 27 194011; from memory) over the strain's lower edge,
- ``FAST@product-SLOW``: product of two channels (bilinear coupling, Ajith et al. 2014,
  Phys. Rev. D 89 122001; from memory), searched by the ordinary transient finder.
"""

from dq.motion.activity import Cells, active_rows, block_reference
from dq.motion.fringe import (
    FringeSource,
    fringe_frequency,
    fringe_rows,
    length_scale,
    speed_extremes,
)
from dq.motion.levels import BandPlan, band_rms, octave_bands, plan_bands
from dq.motion.product import detrended, interpolated

__all__ = [
    "BandPlan",
    "Cells",
    "FringeSource",
    "active_rows",
    "band_rms",
    "block_reference",
    "detrended",
    "fringe_frequency",
    "fringe_rows",
    "interpolated",
    "length_scale",
    "octave_bands",
    "plan_bands",
    "speed_extremes",
]
