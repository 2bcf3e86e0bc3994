"""The invented site's channels: what they measure, their noise and own glitches."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

from dq.observatory.curves import (
    GroundNoise,
    Resonance,
    SensorNoise,
    line_density,
    strain_density,
)

STRAIN = "OV-STRAIN"
UNSAFE = "OV-CHAIN-ERROR"
DEAD = "OV-VALVE-SENSE"
NOT_FINITE = "OV-HANG-NORTH"

#: Violin modes of the mirrors' suspension fibres: width f / Q with Q near 2e4.
VIOLIN_MODES: tuple[Resonance, ...] = (
    Resonance(331.4, 5e-22, 0.016),
    Resonance(333.2, 8e-22, 0.016),
    Resonance(336.9, 4e-22, 0.016),
    Resonance(662.1, 6e-22, 0.03),
    Resonance(668.7, 5e-22, 0.03),
)

#: Strain amplitude of mains harmonics (number -> amplitude) and calibration tones (Hz).
STRAIN_MAINS = {1: 1.2e-21, 2: 3e-22, 3: 6e-22, 5: 4e-22, 7: 2.5e-22}
CALIBRATION_TONES = {36.7: 6e-22, 137.3: 3e-22, 1083.7: 8e-22}

#: Full width at which 4 s of data under a Hann window show a line, Hz: 1.44 / 4 s.
RESOLUTION_HZ = 0.36


def strain_noise(frequency: np.ndarray) -> np.ndarray:
    """Give the strain's stochastic noise in 1/Hz, violin modes included."""
    return strain_density(frequency) + sum(
        line_density(frequency, line) for line in VIOLIN_MODES
    )


def strain_seen(frequency: np.ndarray) -> np.ndarray:
    """Give the strain's spectrum in 1/Hz as seconds of data show it.

    Every line is there, none narrower than ``RESOLUTION_HZ``.
    """
    tones = {50.0 * n: a for n, a in STRAIN_MAINS.items()} | CALIBRATION_TONES
    lines = [Resonance(f, a / np.sqrt(2.0), 0.0) for f, a in tones.items()]
    return strain_density(frequency) + sum(
        line_density(frequency, line, resolution_hz=RESOLUTION_HZ)
        for line in (*VIOLIN_MODES, *lines)
    )


@dataclass(frozen=True)
class OwnGlitches:
    """Glitches that stay in their channel.

    ``kind`` is ``poisson``, ``bursty`` (clusters of a few seconds) or ``periodic``
    (every ``period_s``, give or take 10 ms). ``family`` gives them the looks of a
    family, otherwise they are sine-Gaussians.
    """

    kind: str
    per_hour: float = 0.0
    period_s: float = 0.0
    family: str = ""
    snr_low: float = 7.0
    snr_high: float = 150.0


@dataclass(frozen=True)
class ChannelSpec:
    """One auxiliary channel; ``group`` says which files it shares with others."""

    name: str
    rate: int
    group: str
    quantity: str
    unit: str
    description: str
    noise: GroundNoise | SensorNoise | None
    f_low_hz: float
    safe: str = ""
    dtype: str = "float32"
    compressed: bool = False
    mains: Mapping[int, float] = field(default_factory=dict)
    own: OwnGlitches | None = None

    def seen(self, frequency: np.ndarray) -> np.ndarray:
        """Give the spectrum that seconds of data show, mains lines included."""
        total = self.noise(frequency, resolution_hz=RESOLUTION_HZ)
        for n, amplitude in self.mains.items():
            line = Resonance(50.0 * n, amplitude / np.sqrt(2.0), 0.0)
            total = total + line_density(frequency, line, resolution_hz=RESOLUTION_HZ)
        return total


def _ground(axis: str, rate: int, per_hour: float, **options) -> ChannelSpec:
    return ChannelSpec(
        name=f"OV-GROUND-{axis}",
        rate=rate,
        group="ground",
        quantity="velocity",
        unit="um/s",
        description=f"ground motion, {axis} axis, corner hall",
        noise=GroundNoise(derivative=1, floor=2e-5),
        f_low_hz=2.0,
        own=OwnGlitches("poisson", per_hour, family="ground_motion"),
        **options,
    )


def _bench(number: int, floor: float) -> ChannelSpec:
    return ChannelSpec(
        name=f"OV-BENCH-ACC-{number}",
        rate=2048,
        group="vibration",
        quantity="acceleration",
        unit="m/s^2",
        description=f"accelerometer {number} on the detection bench",
        noise=SensorNoise(floor, 30.0, 2.0, resonances=(Resonance(87.0, 3e-5, 1.5),)),
        f_low_hz=16.0,
        safe="yes",
        mains={1: 2e-5},
        own=OwnGlitches("poisson", 25, family="impact") if number == 1 else None,
    )


def _hang(name: str, where: str, **options) -> ChannelSpec:
    return ChannelSpec(
        name=name,
        rate=256,
        group="suspension",
        quantity="displacement",
        unit="nm",
        description=f"mirror height, {where} arm",
        noise=SensorNoise(0.02, 8.0, 3.0, resonances=(Resonance(13.3, 0.05, 0.2),)),
        f_low_hz=4.0,
        **options,
    )


AUXILIARY: tuple[ChannelSpec, ...] = (
    ChannelSpec(
        "OV-BAFFLE-POS",
        32,
        "baffle",
        "displacement",
        "um",
        "position of the tube baffle",
        GroundNoise(derivative=0, floor=1e-4),
        0.5,
    ),
    ChannelSpec(
        "OV-BAFFLE-PD",
        1024,
        "baffle",
        "photocurrent",
        "mA",
        "photodiode behind the tube baffle",
        SensorNoise(1e-4, 60.0, 4.0, flat_hz=8.0),
        10.0,
        own=OwnGlitches("poisson", 14),
    ),
    ChannelSpec(
        "OV-RF-BEAT",
        2048,
        "oscillators",
        "voltage",
        "V",
        "radio-frequency monitor of the oscillator rack",
        SensorNoise(2e-5, 20.0, 1.0),
        20.0,
        own=OwnGlitches("poisson", 22, family="beat_note"),
    ),
    ChannelSpec(
        "OV-MAINS-VOLT",
        1024,
        "power",
        "voltage",
        "count",
        "mains voltage, corner hall",
        SensorNoise(1.5, 10.0, 1.0),
        15.0,
        safe="yes",
        dtype="int16",
        compressed=True,
        mains={1: 9000.0, 3: 210.0, 5: 90.0, 7: 40.0},
        own=OwnGlitches("poisson", 20, family="mains_burst"),
    ),
    ChannelSpec(
        "OV-MAGNET-HALL",
        512,
        "power",
        "magnetic flux density",
        "count",
        "magnetometer, corner hall",
        SensorNoise(2.0, 6.0, 1.5),
        10.0,
        dtype="int16",
        mains={1: 400.0, 3: 60.0},
        own=OwnGlitches("bursty", 30),
    ),
    _bench(1, 1e-5),
    _bench(2, 1.3e-5),
    _ground("X", 128, 10),
    _ground("Y", 128, 10, compressed=True),
    _ground("Z", 256, 14, safe="yes"),
    ChannelSpec(
        "OV-MIC-HALL",
        2048,
        "sound",
        "pressure",
        "Pa",
        "microphone, corner hall",
        SensorNoise(3e-5, 60.0, 2.0, resonances=(Resonance(118.0, 2e-4, 3.0),)),
        20.0,
        safe="yes",
        mains={2: 1e-4},
        own=OwnGlitches("poisson", 35, family="acoustic"),
    ),
    ChannelSpec(
        "OV-MIC-NORTH",
        1024,
        "sound",
        "pressure",
        "Pa",
        "microphone, north end",
        SensorNoise(3e-5, 50.0, 2.0),
        20.0,
        own=OwnGlitches("bursty", 80, family="acoustic"),
    ),
    ChannelSpec(
        "OV-FIBRE-SENSE",
        1024,
        "suspension",
        "displacement",
        "nm",
        "fibre sensor of the north mirror",
        SensorNoise(1e-3, 15.0, 2.0, resonances=(Resonance(333.2, 4e-3, 0.016),)),
        16.0,
        own=OwnGlitches("poisson", 8),
    ),
    ChannelSpec(
        UNSAFE,
        2048,
        "control",
        "voltage",
        "V",
        "error point of the length control; hears the strain",
        SensorNoise(3e-3, 0.0),
        16.0,
        safe="no",
    ),
    ChannelSpec(
        "OV-PUMP-CURRENT",
        256,
        "power",
        "current",
        "A",
        "current of the cooling pump",
        SensorNoise(2e-3, 5.0, 1.0),
        4.0,
        mains={1: 0.4, 2: 0.1},
        own=OwnGlitches("periodic", period_s=37.0, snr_low=20.0, snr_high=40.0),
    ),
    ChannelSpec(
        "OV-LASER-POWER",
        512,
        "oscillators",
        "power",
        "mW",
        "power of the main laser, relative to its mean",
        SensorNoise(5e-3, 25.0, 1.5),
        8.0,
        own=OwnGlitches("bursty", 140),
    ),
    ChannelSpec(
        "OV-COOLER-VIB",
        512,
        "vibration",
        "acceleration",
        "count",
        "accelerometer on the hall's cooler",
        SensorNoise(4.0, 20.0, 1.0, resonances=(Resonance(29.5, 12.0, 0.3),)),
        8.0,
        dtype="int16",
        compressed=True,
        own=OwnGlitches("periodic", period_s=61.3, snr_low=12.0, snr_high=60.0),
    ),
    ChannelSpec(
        "OV-WIND-MAST",
        32,
        "ground",
        "speed",
        "m/s",
        "wind speed on the mast, relative to its mean",
        SensorNoise(0.05, 1.0, 5 / 3),
        1.0,
        compressed=True,
        own=OwnGlitches("poisson", 25),
    ),
    ChannelSpec(
        "OV-TEMP-HALL",
        32,
        "ground",
        "temperature",
        "mK",
        "air temperature in the hall, relative to its mean",
        SensorNoise(0.1, 0.5, 2.0),
        1.0,
    ),
    ChannelSpec(
        "OV-TILT-WEST",
        64,
        "ground",
        "angle",
        "nrad",
        "tilt of the west slab",
        SensorNoise(0.2, 1.0, 2.0),
        1.5,
        dtype="float64",
    ),
    ChannelSpec(
        "OV-CLOCK-TRIM",
        128,
        "oscillators",
        "voltage",
        "V",
        "tuning voltage of the site clock",
        SensorNoise(1e-4, 2.0, 1.0),
        2.5,
    ),
    _hang(NOT_FINITE, "north"),
    _hang("OV-HANG-WEST", "west", compressed=True),
    ChannelSpec(
        DEAD,
        32,
        "control",
        "pressure",
        "count",
        "vacuum valve, sensor unplugged",
        None,
        1.0,
        dtype="int16",
        compressed=True,
    ),
)

#: Length of a group's files as a share of the night.
FILE_SHARE = {"baffle": 0.5, "oscillators": 1 / 3, "sound": 0.5, "vibration": 0.5}


def spare_channel(number: int) -> ChannelSpec:
    """Give one more quiet channel."""
    return ChannelSpec(
        f"OV-SPARE-{number:04d}",
        256,
        f"spare-{number // 100:02d}",
        "voltage",
        "V",
        "spare converter input",
        SensorNoise(1e-4, 5.0, 1.0),
        4.0,
    )
