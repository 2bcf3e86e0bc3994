"""Simulated signals that are added to the strain to see whether vetoes take them away.

Leading-order inspirals of two compact bodies and sine-Gaussian bursts: simple stand-ins
for what searches look for, scaled to an optimal signal-to-noise ratio in the noise at
hand.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from dq.chirp import (
    chirp_angle,
    chirp_frequency,
    chirp_mass,
    last_orbit_frequency,
    time_to_coalescence,
)
from dq.conditioning.spectrum import median_mean, periodograms
from dq.conditioning.whiten import difference

#: Longest inspiral that is planted, s: heavier pairs than neutron stars from 10 Hz.
LONGEST_S = 4.0


@dataclass(frozen=True)
class Signal:
    """One planted signal.

    Attributes
    ----------
    time_ns : int
        Coalescence of a chirp, centre of a burst.
    kind : str
        ``chirp`` or ``burst``.
    snr : float
        Optimal signal-to-noise ratio.
    first_hz, second : float
        Burst: frequency (Hz) and Q. Chirp: frequency at which it sets in (Hz) and
        chirp mass (solar masses).
    last_hz : float
        Chirp: frequency at which it ends; burst: not used.
    phase : float
    before_s, after_s : float
        Reach around ``time_ns``.
    """

    time_ns: int
    kind: str
    snr: float
    first_hz: float
    second: float
    last_hz: float
    phase: float
    before_s: float
    after_s: float

    def waveform(self, time_s: np.ndarray) -> np.ndarray:
        """Give the signal at times after ``time_ns`` (s), not scaled."""
        if self.kind == "burst":
            tau = self.second / (np.sqrt(2.0) * np.pi * self.first_hz)
            angle = 2.0 * np.pi * self.first_hz * time_s + self.phase
            return np.sin(angle) * np.exp(-((time_s / tau) ** 2))
        return self._chirp(time_s)

    def _chirp(self, time_s: np.ndarray) -> np.ndarray:
        """Give f^(2/3) cos(phase) by the leading-order law, cut off at ``last_hz``."""
        last_s = time_to_coalescence(self.last_hz, mass=self.second)
        tau = -np.asarray(time_s, dtype=np.float64)
        inside = (tau <= self.before_s) & (tau >= last_s)
        tau = np.clip(tau, last_s, self.before_s)
        frequency = chirp_frequency(tau, mass=self.second)
        angle = self.phase + chirp_angle(tau, mass=self.second)
        # it sets in over four cycles, so that its start is no click
        ramp = np.clip((self.before_s - tau) * self.first_hz / 4.0, 0.0, 1.0)
        fade = np.sin(0.5 * np.pi * ramp) ** 2
        rise = (frequency / self.last_hz) ** (2.0 / 3.0)
        return inside * fade * rise * np.cos(angle)


def draw_signal(
    time_ns: int, rng: np.random.Generator, *, low_hz: float, high_hz: float
) -> Signal:
    """Draw a signal: chirps and bursts alike often, SNR 8 to 25 evenly in logarithm.

    Parameters
    ----------
    time_ns : int
    rng : numpy.random.Generator
    low_hz, high_hz : float
        Band that is searched; bursts lie within, chirps set in at its lower edge or
        ``LONGEST_S`` before they end.
    """
    snr = float(np.exp(rng.uniform(np.log(8.0), np.log(25.0))))
    phase = float(rng.uniform(0.0, 2.0 * np.pi))
    if rng.uniform() < 0.5:
        low, high = np.log(1.5 * low_hz), np.log(0.6 * high_hz)
        frequency = float(np.exp(rng.uniform(low, max(high, low))))
        q = float(np.exp(rng.uniform(np.log(4.0), np.log(20.0))))
        reach = 4.0 * q / (np.sqrt(2.0) * np.pi * frequency)
        return Signal(
            time_ns, "burst", snr, frequency, q, frequency, phase, reach, reach
        )
    masses = np.exp(rng.uniform(np.log(5.0), np.log(40.0), 2))
    return chirp_signal(
        time_ns, masses, phase=phase, snr=snr, low_hz=low_hz, high_hz=high_hz
    )


def chirp_signal(
    time_ns: int, masses, *, phase: float, snr: float, low_hz: float, high_hz: float
) -> Signal:
    """Give a chirp that sets in at ``low_hz``, or ``LONGEST_S`` before it ends.

    Parameters
    ----------
    time_ns : int
        Coalescence.
    masses : sequence of two floats
        Solar masses. It ends at the innermost stable orbit or at the end of the band.
    phase, snr : float
    low_hz, high_hz : float
        Band that is searched, Hz.
    """
    mass = float(chirp_mass(*masses))
    last = min(float(last_orbit_frequency(*masses)), 0.9 * high_hz)
    before = min(float(time_to_coalescence(low_hz, mass=mass)), LONGEST_S)
    first = float(min(chirp_frequency(before, mass=mass), 0.8 * last))
    before = float(time_to_coalescence(first, mass=mass))
    return Signal(time_ns, "chirp", snr, first, mass, last, phase, before, 0.0)


def optimal_snr(
    waveform: np.ndarray,
    noise: np.ndarray,
    *,
    sample_rate: float,
    low_hz: float,
    high_hz: float,
) -> float:
    """Give the optimal signal-to-noise ratio of a waveform in some noise.

    Parameters
    ----------
    waveform : ndarray
    noise : ndarray
        A minute or so: the density is a median-mean over segments of a second.
    sample_rate, low_hz, high_hz : float
        Hz.

    Notes
    -----
    rho^2 = 4 sum |h(f)|^2 / S(f) df, on the second differences of both: strain noise
    is too steep for a window's side lobes otherwise.
    """
    segment = 2 * max(round(0.5 * sample_rate), 8)
    power = periodograms(
        difference(noise), sample_rate=sample_rate, segment=segment, hop=segment // 2
    )
    psd = median_mean(power)
    size = max(len(waveform), segment)
    transform = np.fft.rfft(difference(waveform), size) / sample_rate
    frequency = np.fft.rfftfreq(size, 1.0 / sample_rate)
    grid = np.arange(len(psd)) * sample_rate / segment
    band = (frequency >= low_hz) & (frequency <= high_hz)
    density = np.interp(frequency[band], grid, psd)
    step = sample_rate / size
    return float(np.sqrt(4.0 * np.sum(np.abs(transform[band]) ** 2 / density) * step))
