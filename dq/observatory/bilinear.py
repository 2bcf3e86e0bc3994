"""A bilinear coupling: a mirror's pitch, heard as far as the beam is off its centre.

A mirror that turns by theta about its centre moves by theta x d under a beam that lies
d beside it, and the strain of an arm of length L changes by theta x d / L. The beam
spot wanders about the centre within seconds, the pitch jitters at audio frequencies:
neither sensor alone says how loud the strain will be, their product does (bilinear
coupling, Ajith et al. 2014, Phys. Rev. D 89 122001; from memory).

The sources here come after all others and have random streams of their own: a night
with them holds the very same other sources as the night without.
"""

from __future__ import annotations

import numpy as np

from dq.observatory.channels import ChannelSpec
from dq.observatory.curves import SensorNoise
from dq.observatory.families import Source, sine_gaussian

#: Family of these disturbances in the truth tables; no sorter was trained on it.
FAMILY = "spot_jitter"

PITCH = "OV-PITCH-NORTH"
SPOT = "OV-SPOT-NORTH"

#: What the night calls the product of the two.
PRODUCT = f"{PITCH}@product-{SPOT}"

#: m; the arm's length.
ARM_M = 3000.0

#: Strain per prad of pitch and mm of beam offset: theta x d / L.
STRAIN_PER_PRAD_MM = 1e-12 * 1e-3 / ARM_M

#: mm; root mean square of the beam's wandering (own choice: of the pitch bursts one in
#: four is heard in the strain).
SPOT_RMS_MM = 0.35

#: Hz; where the beam wanders, and by how many tones of random phase.
_SPOT_BAND_HZ, _SPOT_TONES = (0.08, 0.3), 40

#: SNR of a burst in the pitch sensor, Pareto of this index within these bounds.
PITCH_SNR, PITCH_SNR_INDEX = (8.0, 100.0), 1.2

#: Hz; the mirror's pitch bursts (own choice: where the strain is quiet).
_PITCH_BAND_HZ = (60.0, 300.0)

CHANNELS: tuple[ChannelSpec, ...] = (
    ChannelSpec(
        PITCH,
        1024,
        "beam",
        "angle",
        "prad",
        "pitch of the north mirror",
        SensorNoise(1e-4, 30.0, 2.0),
        20.0,
    ),
    ChannelSpec(
        SPOT,
        32,
        "beam",
        "beam position",
        "mm",
        "offset of the beam spot on the north mirror",
        SensorNoise(2e-3, 0.5, 1.0),
        0.5,
    ),
)


def spot_motion(rng: np.random.Generator, duration_s: float) -> Source:
    """Draw how the beam wanders over a whole night, in mm about the mirror's centre."""
    frequency = rng.uniform(*_SPOT_BAND_HZ, _SPOT_TONES)
    phase = rng.uniform(0.0, 2 * np.pi, _SPOT_TONES)
    amplitude = SPOT_RMS_MM * np.sqrt(2.0 / _SPOT_TONES)

    def offset(t):
        total = np.zeros_like(t)
        for f, p in zip(frequency, phase, strict=True):
            total += np.cos(2 * np.pi * f * t + p)
        return amplitude * total

    return Source(lambda t, top_hz: offset(t), 0.0, duration_s, quantity=offset)


def pitch_burst(rng: np.random.Generator) -> Source:
    """Draw a burst of the mirror's pitch."""
    low, high = _PITCH_BAND_HZ
    return sine_gaussian(rng, f_low_hz=low, f_high_hz=high)


def under_beam(burst: Source, spot: Source, at_s: float) -> Source:
    """Give what a beam hears of a pitch burst at a time: their product, prad mm."""

    def wave(t, top_hz):
        return burst.wave(t, top_hz) * spot.quantity(t + at_s)

    return Source(wave, burst.before_s, burst.after_s)
