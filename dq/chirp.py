"""The leading-order chirp of two compact bodies: masses, frequency, time, waveform.

Peters & Mathews 1963, Phys. Rev. 131 435, in the usual textbook form (Maggiore 2008).
The invented site has a law of its own, so that a slip in one shows against the other.
"""

from __future__ import annotations

import numpy as np

#: Solar mass in seconds, G M / c^3 (IAU 2015 nominal solar mass parameter, from
#: memory).
SOLAR_MASS_S = 4.925490947e-6


def chirp_mass(mass_1, mass_2):
    """Give (m1 m2)^(3/5) / (m1 + m2)^(1/5), in the unit of the masses.

    Examples
    --------
    >>> round(float(chirp_mass(30.0, 30.0)), 5)
    26.11652
    """
    mass_1, mass_2 = np.asarray(mass_1, float), np.asarray(mass_2, float)
    return (mass_1 * mass_2) ** 0.6 / (mass_1 + mass_2) ** 0.2


def chirp_frequency(remaining_s, *, mass):
    """Give the gravitational-wave frequency a time before coalescence, in Hz.

    Parameters
    ----------
    remaining_s : array_like of float
        Seconds before coalescence, positive.
    mass : float
        Chirp mass in solar masses.

    Notes
    -----
    f = (1/pi) (5 / (256 tau))^(3/8) (G M / c^3)^(-5/8), leading order (Peters &
    Mathews 1963, Phys. Rev. 131 435; textbook form Maggiore 2008).

    Examples
    --------
    >>> round(float(chirp_frequency(0.15, mass=26.11652)), 4)
    40.0393
    """
    tau = np.asarray(remaining_s, float)
    return (5.0 / (256.0 * tau)) ** 0.375 * (mass * SOLAR_MASS_S) ** -0.625 / np.pi


def chirp_angle(remaining_s, *, mass):
    """Give the phase a time before coalescence, radians; 0 at coalescence.

    Notes
    -----
    -2 (tau / (5 G M / c^3))^(5/8), the integral of 2 pi f.
    """
    tau = np.asarray(remaining_s, float)
    return -2.0 * (tau / (5.0 * mass * SOLAR_MASS_S)) ** 0.625


def time_to_coalescence(frequency_hz, *, mass):
    """Give the seconds left at a frequency, the inverse of ``chirp_frequency``.

    Examples
    --------
    >>> round(float(time_to_coalescence(40.0, mass=26.11652)), 5)
    0.15039
    """
    rate = np.pi * np.asarray(frequency_hz, float)
    return 5.0 / 256.0 * rate ** (-8 / 3) * (mass * SOLAR_MASS_S) ** (-5 / 3)


def last_orbit_frequency(mass_1, mass_2):
    """Give c^3 / (6^(3/2) pi G M), the innermost stable orbit's frequency in Hz.

    Examples
    --------
    >>> round(float(last_orbit_frequency(30.0, 30.0)), 3)
    73.286
    """
    return 1.0 / (6.0**1.5 * np.pi * (mass_1 + mass_2) * SOLAR_MASS_S)


def chirp_waveform(
    time_s: np.ndarray,
    *,
    mass_1: float,
    mass_2: float,
    start_hz: float,
    phase: float = 0.0,
) -> np.ndarray:
    """Make a leading-order chirp that coalesces at time 0.

    Parameters
    ----------
    time_s : ndarray, shape (n,)
        Seconds relative to coalescence.
    mass_1, mass_2 : float
        Solar masses.
    start_hz : float
        Frequency at which the wave is faded in over two cycles.
    phase : float
        Radians at coalescence.

    Returns
    -------
    ndarray, shape (n,)
        Dimensionless, peak of order 1.

    Raises
    ------
    ValueError
        A mass or the starting frequency is not positive.

    Notes
    -----
    Amplitude grows as f^(2/3) and the phase is -2 (tau / (5 G M / c^3))^(5/8) (Peters
    & Mathews 1963). Beyond the innermost stable orbit the formula does not hold: from
    there the wave keeps that orbit's frequency and dies within two of its periods, a
    stand-in for the merger whose details are not claimed.
    """
    if min(mass_1, mass_2, start_hz) <= 0:
        raise ValueError(
            f"masses {mass_1}, {mass_2} and start_hz={start_hz} must be positive"
        )
    mass = float(chirp_mass(mass_1, mass_2))
    end_hz = float(last_orbit_frequency(mass_1, mass_2))
    start_hz = min(start_hz, 0.5 * end_hz)
    end_s = float(time_to_coalescence(end_hz, mass=mass))
    tau = np.maximum(-np.asarray(time_s, float), end_s)
    frequency = chirp_frequency(tau, mass=mass)
    angle = phase + chirp_angle(tau, mass=mass)
    late = np.maximum(np.asarray(time_s, float) + end_s, 0.0)
    angle = angle + 2.0 * np.pi * end_hz * late
    fade_out = np.exp(-0.5 * (late * end_hz) ** 2)
    begin_s = float(time_to_coalescence(start_hz, mass=mass))
    risen = np.clip((begin_s - tau) * start_hz / 2.0, 0.0, 1.0)
    fade_in = 0.5 - 0.5 * np.cos(np.pi * risen)
    return (frequency / end_hz) ** (2 / 3) * fade_in * fade_out * np.cos(angle)
