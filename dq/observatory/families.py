"""Random members of every family: the physics drawn, ready to be sampled anywhere.

A source is a function of time, so the strain and every witness sample the same event
at their own rate and delay.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np

from dq.observatory import waveforms as wf
from dq.observatory.channels import VIOLIN_MODES


@dataclass(frozen=True)
class Source:
    """One event of a family, its anchor at time 0.

    Attributes
    ----------
    wave : callable
        ``wave(time_s, top_hz)``: what strain and witnesses see, amplitude of order 1,
        without content above ``top_hz``.
    before_s, after_s : float
        Reach around the anchor; beyond it the wave is negligible.
    quantity : callable or None
        ``quantity(time_s)``: the source's own quantity for a sensor that records it,
        in that channel's unit.
    cuts_s : tuple of float
        Where the event falls into parts that count as transients of their own.
    """

    wave: Callable[[np.ndarray, float], np.ndarray]
    before_s: float
    after_s: float
    quantity: Callable[[np.ndarray], np.ndarray] | None = None
    cuts_s: tuple[float, ...] = field(default=())


def _log_uniform(rng: np.random.Generator, low: float, high: float) -> float:
    return float(np.exp(rng.uniform(np.log(low), np.log(high))))


def _angle(rng: np.random.Generator) -> float:
    return float(rng.uniform(0.0, 2 * np.pi))


def scattered_light(rng: np.random.Generator) -> Source:
    """Draw an epoch in which a baffle swings and scatters light: a train of arches.

    The swing grows and dies; its largest speed gives the highest arch,
    f = 4 pi n f_m A / lambda.
    """
    duration = rng.uniform(20.0, 36.0)
    swing_hz = rng.uniform(0.12, 0.24)
    passes = int(rng.choice([2, 4]))
    top_hz = _log_uniform(rng, 35.0, 90.0)
    amplitude = top_hz * wf.LASER_WAVELENGTH_M / (4 * np.pi * passes * swing_hz)
    turn, phase = _angle(rng), _angle(rng)

    def position(t):
        return wf.swing(
            t,
            amplitude=amplitude,
            frequency_hz=swing_hz,
            duration_s=duration,
            phase=turn,
        )

    def wave(t, top_hz):
        share = np.cos(np.pi * np.clip(t / duration, -0.5, 0.5))
        return share * wf.fringes(position(t), passes=passes, phase=phase)

    grid = np.arange(-duration / 2, duration / 2, 1e-3)
    speed = np.diff(position(grid))
    turns = grid[1:-1][speed[1:] * speed[:-1] < 0]
    return Source(
        wave=wave,
        before_s=duration / 2,
        after_s=duration / 2,
        quantity=lambda t: 1e6 * position(t),
        cuts_s=tuple(turns.tolist()),
    )


def beat_note(rng: np.random.Generator) -> Source:
    """Draw a whistle: two oscillators' difference frequency sweeps through zero."""
    sweep = _log_uniform(rng, 1500.0, 6000.0) * rng.choice([-1, 1])
    high = rng.uniform(500.0, 1100.0)
    reach = 1.6 * high / abs(sweep)
    curvature = rng.uniform(-0.25, 0.25) * abs(sweep) / reach
    phase = _angle(rng)

    def wave(t, top_hz):
        return wf.beat_note(
            t,
            sweep=sweep,
            curvature=curvature,
            low_hz=40.0,
            high_hz=min(high, 0.8 * top_hz),
            phase=phase,
        )

    return Source(wave, 1.3 * reach, 1.3 * reach)


def mains_burst(rng: np.random.Generator) -> Source:
    """Draw a switching of a heavy load: harmonics of 50 Hz that rise and decay."""
    numbers = (1, 2, 3, 5, 7)
    harmonics = {n: float(rng.lognormal(-0.3 * np.log(n), 0.4)) for n in numbers}
    phases = {n: _angle(rng) for n in numbers}
    decay = _log_uniform(rng, 0.06, 0.25)

    def wave(t, top_hz):
        kept = {n: a for n, a in harmonics.items() if 50.0 * n < top_hz}
        return wf.mains_comb(
            t, harmonics=kept, phases=phases, rise_s=0.004, decay_s=decay
        )

    return Source(wave, 0.0, 8 * decay)


def impact(rng: np.random.Generator) -> Source:
    """Draw a knock: a few structural modes ring down together."""
    count = int(rng.integers(2, 5))
    modes = [
        (_log_uniform(rng, 70.0, 420.0), rng.uniform(8.0, 30.0), _angle(rng))
        for _ in range(count)
    ]
    weights = rng.lognormal(0.0, 0.4, count)

    def wave(t, top_hz):
        total = np.zeros_like(t)
        for (f, q, phase), weight in zip(modes, weights, strict=True):
            if f < top_hz:
                total += weight * wf.ringdown(t, frequency_hz=f, q=q, phase=phase)
        return total * wf.onset(t, 0.001)

    longest = max(wf.ringdown_time(frequency_hz=f, q=q) for f, q, _ in modes)
    return Source(wave, 0.0, 8 * longest)


def _noise_burst(rng, low: float, high: float, sigma: float, count: int) -> Source:
    frequencies = np.sort(rng.uniform(low, high, count))
    phases = rng.uniform(0.0, 2 * np.pi, count)

    def wave(t, top_hz):
        kept = frequencies < top_hz
        return wf.noise_burst(
            t, frequencies_hz=frequencies[kept], phases=phases[kept], sigma_s=sigma
        )

    return Source(wave, 5 * sigma, 5 * sigma)


def ground_motion(rng: np.random.Generator) -> Source:
    """Draw a passing vehicle or footfall: 10 to 30 Hz under a slow envelope."""
    return _noise_burst(rng, 10.0, 30.0, rng.uniform(0.2, 0.6), 40)


def acoustic(rng: np.random.Generator) -> Source:
    """Draw a noise in the hall: broadband, 60 to 300 Hz."""
    return _noise_burst(rng, 60.0, 300.0, _log_uniform(rng, 0.03, 0.2), 64)


def violin_ringdown(rng: np.random.Generator) -> Source:
    """Draw a fibre that was plucked: it rings near a violin mode."""
    mode = VIOLIN_MODES[int(rng.integers(0, 3))].frequency_hz
    f, q, phase = mode + rng.normal(0.0, 1.5), _log_uniform(rng, 150.0, 600.0), 0.0

    def wave(t, top_hz):
        if f >= top_hz:
            return np.zeros_like(t)
        return wf.ringdown(t, frequency_hz=f, q=q, phase=phase) * wf.onset(t, 0.01)

    return Source(wave, 0.0, 7 * wf.ringdown_time(frequency_hz=f, q=q))


def short_burst(rng: np.random.Generator) -> Source:
    """Draw a click of less than one to a few cycles that no sensor explains."""
    f, q = _log_uniform(rng, 45.0, 700.0), _log_uniform(rng, 0.8, 6.0)
    phase = _angle(rng)
    reach = 4.5 * q / (np.sqrt(2.0) * np.pi * f)
    return Source(
        lambda t, top_hz: wf.sine_gaussian(t, frequency_hz=f, q=q, phase=phase),
        reach,
        reach,
    )


def saturation(rng: np.random.Generator) -> Source:
    """Draw an upset of the length control that drives the converter to its rail."""
    f, q = rng.uniform(14.0, 40.0), rng.uniform(5.0, 10.0)

    def wave(t, top_hz):
        return wf.ringdown(t, frequency_hz=f, q=q, phase=-np.pi / 2)

    return Source(wave, 0.0, 14 * wf.ringdown_time(frequency_hz=f, q=q))


def sine_gaussian(
    rng: np.random.Generator, *, f_low_hz: float, f_high_hz: float
) -> Source:
    """Draw a sine-Gaussian within a band, for glitches without a story."""
    f, q = _log_uniform(rng, f_low_hz, f_high_hz), _log_uniform(rng, 2.5, 20.0)
    phase = _angle(rng)
    reach = 4.5 * q / (np.sqrt(2.0) * np.pi * f)
    return Source(
        lambda t, top_hz: wf.sine_gaussian(t, frequency_hz=f, q=q, phase=phase),
        reach,
        reach,
    )


def actuated_chirp(rng: np.random.Generator) -> Source:
    """Draw an actuated inspiral that coalesces at the anchor."""
    mass_1, mass_2 = sorted(rng.uniform(8.0, 32.0, 2).tolist(), reverse=True)
    phase, start_hz = _angle(rng), 24.0

    def wave(t, top_hz):
        return wf.chirp(t, mass_1=mass_1, mass_2=mass_2, start_hz=start_hz, phase=phase)

    mass = wf.chirp_mass(mass_1, mass_2)
    return Source(wave, float(wf.chirp_time(start_hz, chirp_mass=mass)), 0.0)


#: Family name -> how one of its members is drawn.
DRAW: dict[str, Callable[[np.random.Generator], Source]] = {
    "scattered_light": scattered_light,
    "beat_note": beat_note,
    "mains_burst": mains_burst,
    "impact": impact,
    "ground_motion": ground_motion,
    "acoustic": acoustic,
    "violin_ringdown": violin_ringdown,
    "short_burst": short_burst,
    "saturation": saturation,
    "test_signal": actuated_chirp,
}
