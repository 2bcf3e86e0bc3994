"""Waveforms of disturbances and test signals, as functions of time.

Times in s, frequencies in Hz, amplitudes without unit unless stated. Every function
takes an array of any shape and gives one of the same shape.
"""

from __future__ import annotations

import numpy as np

from dq.errors import InputError

#: G M_sun / c^3, s.
SOLAR_MASS_S = 4.925490947e-6

#: Wavelength of the interferometer's laser, m (common practice).
LASER_WAVELENGTH_M = 1064e-9


def sine_gaussian(time_s, *, frequency_hz, q, phase=0.0):
    """Give sin(2 pi f t + phase) exp(-t^2 / tau^2), tau = Q / (sqrt(2) pi f)."""
    tau = q / (np.sqrt(2.0) * np.pi * frequency_hz)
    t = np.asarray(time_s, dtype=np.float64)
    return np.sin(2 * np.pi * frequency_hz * t + phase) * np.exp(-((t / tau) ** 2))


def sine_gaussian_rss(*, frequency_hz, q, amplitude=1.0):
    """Give the root-sum-square of a sine-Gaussian with phase 0, amplitude s^(1/2).

    h_rss^2 = h0^2 Q (1 - exp(-Q^2)) / (4 sqrt(pi) f).

    Examples
    --------
    >>> round(float(sine_gaussian_rss(frequency_hz=100, q=9, amplitude=8.87557)), 5)
    1.0
    """
    energy = q * -np.expm1(-(q**2)) / (4 * np.sqrt(np.pi) * frequency_hz)
    return amplitude * np.sqrt(energy)


def onset(time_s, rise_s):
    """Give 0 before time 0 and 1 - exp(-t / rise) after."""
    t = np.asarray(time_s, dtype=np.float64)
    return np.where(t > 0, -np.expm1(-np.maximum(t, 0.0) / rise_s), 0.0)


def ringdown(time_s, *, frequency_hz, q, phase=0.0):
    """Give exp(-pi f t / Q) cos(2 pi f t + phase) from time 0 on, 0 before."""
    t = np.asarray(time_s, dtype=np.float64)
    after = np.maximum(t, 0.0)
    decay = np.exp(-np.pi * frequency_hz * after / q)
    return np.where(t >= 0, decay * np.cos(2 * np.pi * frequency_hz * t + phase), 0.0)


def ringdown_time(*, frequency_hz, q):
    """Give the time in which a ringdown's amplitude falls by e, Q / (pi f), s."""
    return q / (np.pi * frequency_hz)


def chirp_mass(mass_1, mass_2):
    """Give (m1 m2)^(3/5) / (m1 + m2)^(1/5), in the unit of the masses."""
    return (mass_1 * mass_2) ** 0.6 / (mass_1 + mass_2) ** 0.2


def chirp_frequency(remaining_s, *, chirp_mass):
    """Give the leading-order frequency (Hz) a time before coalescence.

    f = (1/pi) (5 / (256 tau))^(3/8) (G M_c / c^3)^(-5/8); Peters & Mathews 1963, in
    the form of Maggiore 2008. ``chirp_mass`` in solar masses.
    """
    tau = np.asarray(remaining_s, dtype=np.float64)
    return (5 / (256 * tau)) ** 0.375 * (chirp_mass * SOLAR_MASS_S) ** -0.625 / np.pi


def chirp_time(frequency_hz, *, chirp_mass):
    """Give the time (s) from a frequency to coalescence, the inverse of the above."""
    turn = np.pi * np.asarray(frequency_hz, dtype=np.float64)
    return 5 / 256 * turn ** (-8 / 3) * (chirp_mass * SOLAR_MASS_S) ** (-5 / 3)


def last_orbit_frequency(total_mass):
    """Give the frequency (Hz) at the innermost stable orbit, c^3 / (6^1.5 pi G M)."""
    return 1.0 / (6.0**1.5 * np.pi * total_mass * SOLAR_MASS_S)


def chirp(time_s, *, mass_1, mass_2, start_hz, phase=0.0):
    """Give a leading-order inspiral that coalesces at time 0.

    (f / f_last)^(2/3) cos(phase - 2 (5 G M_c / c^3)^(-5/8) tau^(5/8)) from
    ``start_hz`` to the innermost stable orbit, where the formula ends. The first cycles
    fade in, and the last one out, so that the cut itself is no click.

    Raises
    ------
    InputError
        ``start_hz`` is not below the frequency of the innermost stable orbit.
    """
    mass = chirp_mass(mass_1, mass_2)
    last = last_orbit_frequency(mass_1 + mass_2)
    if not 0 < start_hz < last:
        raise InputError(
            f"start_hz={start_hz:g} must lie in 0..{last:.4g} Hz, the innermost "
            "stable orbit; lower start_hz or the masses"
        )
    first_s = chirp_time(start_hz, chirp_mass=mass)
    last_s = chirp_time(last, chirp_mass=mass)
    tau = -np.asarray(time_s, dtype=np.float64)
    inside = (tau <= first_s) & (tau >= last_s)
    tau = np.clip(tau, last_s, first_s)
    frequency = chirp_frequency(tau, chirp_mass=mass)
    angle = phase - 2 * (5 * mass * SOLAR_MASS_S) ** -0.625 * tau**0.625
    fade_in = _smooth((first_s - tau) * start_hz / 4)
    fade_out = _smooth((tau - last_s) * last)
    return inside * fade_in * fade_out * (frequency / last) ** (2 / 3) * np.cos(angle)


def _smooth(x):
    return np.sin(0.5 * np.pi * np.clip(x, 0.0, 1.0)) ** 2


def fringe_frequency(speed, *, passes=1, wavelength_m=LASER_WAVELENGTH_M):
    """Give the frequency (Hz) of light scattered off a surface moving at ``speed`` m/s.

    f = 2 n |v| / lambda; Accadia et al. 2010, CQG 27 194011.
    """
    return 2 * passes * np.abs(speed) / wavelength_m


def fringes(position_m, *, passes=1, phase=0.0, wavelength_m=LASER_WAVELENGTH_M):
    """Give sin(4 pi n x / lambda + phase), the scattered light of a surface at x.

    Accadia et al. 2010, CQG 27 194011; Ottaway, Fritschel & Waldman 2012, Opt. Express
    20 8329.
    """
    return np.sin(4 * np.pi * passes * np.asarray(position_m) / wavelength_m + phase)


def swing(time_s, *, amplitude, frequency_hz, duration_s, phase=0.0):
    """Give a swing that grows and dies: A cos^2(pi t / T) sin(2 pi f t + phase)."""
    t = np.asarray(time_s, dtype=np.float64)
    grown = np.where(np.abs(t) < duration_s / 2, np.cos(np.pi * t / duration_s), 0.0)
    return amplitude * grown**2 * np.sin(2 * np.pi * frequency_hz * t + phase)


def beat_note(time_s, *, sweep, low_hz, high_hz, curvature=0.0, phase=0.0):
    """Give the beat of two oscillators whose difference frequency passes zero.

    f(t) = sweep t + curvature t^2 (Hz, from Hz/s and Hz/s^2), phase 2 pi times its
    integral. The read-out passes ``low_hz`` to ``high_hz``:
    gain f^2 / (f^2 + low^2) / (1 + (f / high)^12).
    """
    t = np.asarray(time_s, dtype=np.float64)
    f = sweep * t + curvature * t**2
    angle = 2 * np.pi * (sweep * t**2 / 2 + curvature * t**3 / 3) + phase
    gain = f**2 / (f**2 + low_hz**2) / (1.0 + (f / high_hz) ** 12)
    return gain * np.cos(angle)


def mains_comb(time_s, *, harmonics, phases, rise_s, decay_s, base_hz=50.0):
    """Give a burst at mains harmonics that rises and decays.

    (1 - exp(-t/rise)) exp(-t/decay) sum_n a_n cos(2 pi n 50 t + p_n), ``harmonics``
    mapping n to a_n and ``phases`` n to p_n.
    """
    t = np.asarray(time_s, dtype=np.float64)
    envelope = onset(t, rise_s) * np.exp(-np.maximum(t, 0.0) / decay_s)
    total = np.zeros_like(t)
    for n, amplitude in harmonics.items():
        total += amplitude * np.cos(2 * np.pi * n * base_hz * t + phases[n])
    return envelope * total


def noise_burst(time_s, *, frequencies_hz, phases, sigma_s):
    """Give many tones of random phase under exp(-t^2 / (2 sigma^2)): a noise burst.

    Being a function of time, one burst can be sampled by sensors of any rate and delay.
    """
    t = np.asarray(time_s, dtype=np.float64)
    total = np.zeros_like(t)
    for frequency, phase in zip(frequencies_hz, phases, strict=True):
        total += np.cos(2 * np.pi * frequency * t + phase)
    return total * np.exp(-0.5 * (t / sigma_s) ** 2) / np.sqrt(len(frequencies_hz))
