"""Noise spectra: detector design curves, ground motion, sensors, lines.

All densities are one-sided power spectral densities over frequency in Hz.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from dq.errors import InputError


@dataclass(frozen=True)
class DesignCurve:
    """Analytic design curve S_h(f) = s0 * shape(f / f0), valid from ``f_valid``.

    Sathyaprakash & Schutz 2009, Living Rev. Relativity 12:2, Table 1 (coefficients
    from memory).
    """

    f_valid: float
    f0: float
    s0: float
    shape: Callable[[np.ndarray], np.ndarray]

    def __call__(self, frequency: np.ndarray) -> np.ndarray:
        """Give S_h in 1/Hz at ``frequency`` in Hz, above 0."""
        return self.s0 * self.shape(np.asarray(frequency, dtype=np.float64) / self.f0)


def _bench(x: np.ndarray) -> np.ndarray:
    return (1 - x**2 + x**4 / 2) / (1 + x**2 / 2)


DESIGN_CURVES: dict[str, DesignCurve] = {
    "advanced_4km": DesignCurve(
        20, 215, 1e-49, lambda x: x**-4.14 - 5 * x**-2 + 111 * _bench(x)
    ),
    "first_generation_4km": DesignCurve(
        40,
        150,
        9e-46,
        lambda x: (4.49 * x) ** -56 + 0.16 * x**-4.52 + 0.52 + 0.32 * x**2,
    ),
    "first_generation_3km": DesignCurve(
        20, 500, 3.2e-46, lambda x: (7.8 * x) ** -5 + 2 / x + 0.63 + x**2
    ),
    "first_generation_600m": DesignCurve(
        40, 150, 1e-46, lambda x: (3.4 * x) ** -30 + 34 / x + 20 * _bench(x)
    ),
    "first_generation_300m": DesignCurve(
        75, 400, 7.5e-46, lambda x: x**-5 + 13 / x + 9 * (1 + x**2)
    ),
}

#: The invented site's curve is flat below this frequency, Hz. The design curve ends at
#: 20 Hz; carried on to 0 it would diverge. At 8 Hz the amplitude is 75 times that of
#: the quietest frequency, and at 20 Hz the curve is changed by 4e-4 (own choice).
WALL_HZ = 8.0


def strain_density(frequency: np.ndarray) -> np.ndarray:
    """Give the site's strain noise in 1/Hz, finite at every frequency.

    The 3 km first-generation curve, its argument kept above the seismic wall by
    f -> (f^8 + WALL_HZ^8)^(1/8).
    """
    f = np.asarray(frequency, dtype=np.float64)
    smooth = WALL_HZ * (1.0 + (f / WALL_HZ) ** 8) ** 0.125
    return DESIGN_CURVES["first_generation_3km"](smooth)


@dataclass(frozen=True)
class Resonance:
    """A thermally driven line: ``rms`` in the channel's unit, full width in Hz."""

    frequency_hz: float
    rms: float
    width_hz: float


def line_density(
    frequency: np.ndarray, line: Resonance, *, resolution_hz: float = 0.0
) -> np.ndarray:
    """Give a line's density; its integral is ``rms``^2 whatever the shape.

    A Lorentzian of the line's width; where the resolution (full width, Hz) is coarser,
    a Gaussian of that width, which like a good window has no far wings.
    """
    offset = np.asarray(frequency, dtype=np.float64) - line.frequency_hz
    if resolution_hz > line.width_hz:
        sigma = resolution_hz / np.sqrt(8.0 * np.log(2.0))
        shape = np.exp(-0.5 * (offset / sigma) ** 2)
        return line.rms**2 * shape / (np.sqrt(2 * np.pi) * sigma)
    half = 0.5 * line.width_hz
    return line.rms**2 * half / (np.pi * (offset**2 + half**2))


# Peterson 1993, US Geological Survey open-file report 93-322; rows of period in s from
# which a piece holds, A and B of A + B log10(period) (coefficients from memory; every
# joint is continuous within 0.013 dB).
_LOW_MODEL = np.array(
    [
        (0.10, -162.36, 5.64),
        (0.17, -166.70, 0.0),
        (0.40, -170.00, -8.30),
        (0.80, -166.40, 28.90),
        (1.24, -168.60, 52.48),
        (2.40, -159.98, 29.81),
        (4.30, -141.10, 0.0),
        (5.00, -71.36, -99.77),
        (6.00, -97.26, -66.49),
        (10.0, -132.18, -31.57),
        (12.0, -205.27, 36.16),
        (15.6, -37.65, -104.33),
        (21.9, -114.37, -47.10),
        (31.6, -160.58, -16.28),
        (45.0, -187.50, 0.0),
        (70.0, -216.47, 15.70),
        (101.0, -185.00, 0.0),
        (154.0, -168.34, -7.61),
        (328.0, -217.43, 11.90),
        (600.0, -258.28, 26.60),
        (1.0e4, -346.88, 48.75),
    ]
)
_HIGH_MODEL = np.array(
    [
        (0.10, -108.73, -17.23),
        (0.22, -150.34, -80.50),
        (0.32, -122.31, -23.87),
        (0.80, -116.85, 32.51),
        (3.80, -108.48, 18.08),
        (4.60, -74.66, -32.95),
        (6.30, 0.66, -127.18),
        (7.90, -93.37, -22.42),
        (15.4, 73.54, -162.98),
        (20.0, -151.52, 10.01),
        (354.8, -206.66, 31.63),
    ]
)
_LONGEST_PERIOD_S = 1.0e5


def ground_acceleration_db(period_s: np.ndarray, *, model: str) -> np.ndarray:
    """Give Peterson's ``low`` or ``high`` noise model in dB re 1 (m/s^2)^2/Hz.

    Peterson 1993, US Geological Survey open-file report 93-322. The models hold for
    periods of 0.1 s to 1e5 s; beyond these, the value at the end is kept.

    Raises
    ------
    InputError
        ``model`` is neither.
    """
    rows = {"low": _LOW_MODEL, "high": _HIGH_MODEL}.get(model)
    if rows is None:
        raise InputError(f"ground model {model!r} is unknown; give 'low' or 'high'")
    period = np.clip(np.asarray(period_s, dtype=np.float64), 0.1, _LONGEST_PERIOD_S)
    piece = np.searchsorted(rows[:, 0], period, side="right") - 1
    return rows[piece, 1] + rows[piece, 2] * np.log10(period)


@dataclass(frozen=True)
class GroundNoise:
    """Ground motion between Peterson's models, plus the sensor's own floor.

    Attributes
    ----------
    derivative : int
        0 displacement, 1 velocity, 2 acceleration.
    mix : float
        0 for the low model, 1 for the high one; decibels are mixed linearly.
    scale : float
        Channel units per SI unit.
    floor : float
        White amplitude density of the sensor, channel unit per sqrt(Hz).
    """

    derivative: int = 1
    mix: float = 0.35
    scale: float = 1e6
    floor: float = 0.0

    def __call__(
        self, frequency: np.ndarray, *, resolution_hz: float = 0.0
    ) -> np.ndarray:
        """Give the density in channel units squared per Hz; 0 at frequency 0.

        The model has no lines, so ``resolution_hz`` changes nothing.
        """
        f = np.asarray(frequency, dtype=np.float64)
        safe = np.where(f > 0, f, 1.0)
        low = ground_acceleration_db(1.0 / safe, model="low")
        high = ground_acceleration_db(1.0 / safe, model="high")
        power = 10.0 ** ((low + self.mix * (high - low)) / 10.0)
        power /= (2 * np.pi * safe) ** (2 * (2 - self.derivative))
        return np.where(f > 0, self.scale**2 * power, 0.0) + self.floor**2


@dataclass(frozen=True)
class SensorNoise:
    """White floor that rises as a power law below a knee, with resonances.

    ``floor`` in channel unit per sqrt(Hz); density floor^2 (1 + (knee/f)^slope), flat
    below ``flat_hz``.
    """

    floor: float
    knee_hz: float = 0.0
    slope: float = 2.0
    flat_hz: float = 0.05
    resonances: tuple[Resonance, ...] = ()

    def __call__(
        self, frequency: np.ndarray, *, resolution_hz: float = 0.0
    ) -> np.ndarray:
        """Give the density in channel units squared per Hz.

        No resonance is shown narrower than ``resolution_hz``.
        """
        f = np.hypot(np.asarray(frequency, dtype=np.float64), self.flat_hz)
        density = self.floor**2 * (1.0 + (self.knee_hz / f) ** self.slope)
        for line in self.resonances:
            density = density + line_density(
                frequency, line, resolution_hz=resolution_hz
            )
        return density
