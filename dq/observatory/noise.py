"""Gaussian noise of a wanted spectrum, and the lines that stand in it."""

from __future__ import annotations

import zlib
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import scipy.fft

from dq.errors import InputError

#: Noise is made in pieces of this length that fade into each other, s: memory stays
#: bounded and lines of a few mHz are still resolved (own choice).
PIECE_S = 512
FADE_S = 16

_CHUNK = 1 << 18


def stream(seed: int, *names: str) -> np.random.Generator:
    """Give the random stream of a named part; parts do not disturb each other."""
    return np.random.default_rng([seed, *(zlib.crc32(n.encode()) for n in names)])


def coloured_noise(
    density: Callable[[np.ndarray], np.ndarray],
    *,
    sample_rate: int,
    samples: int,
    rng: np.random.Generator,
    dtype: type = np.float64,
) -> np.ndarray:
    """Make stationary Gaussian noise with a one-sided power spectral density.

    Parameters
    ----------
    density : callable
        Frequency in Hz -> power per Hz.
    sample_rate : int
        Hz.
    samples : int
    rng : numpy.random.Generator
    dtype : numpy float type, optional
        Type of the result and of the arithmetic.

    Returns
    -------
    ndarray, shape (samples,)

    Raises
    ------
    InputError
        The density is negative or not finite somewhere.

    Notes
    -----
    Each piece is the inverse Fourier transform of independent normal bins of variance
    S f_s n / 2. Neighbouring pieces are independent; over the fade they are weighted by
    sin and cos of (pi/2) sin^2(pi u / 2), whose squares add up to 1, so the variance
    stays even, and whose slope vanishes at both ends, so steep noise gets no kink.
    """
    fade = FADE_S * sample_rate
    piece = scipy.fft.next_fast_len(min(PIECE_S * sample_rate, samples + fade), True)
    frequency = np.arange(piece // 2 + 1) * (sample_rate / piece)
    power = density(frequency)
    if not np.all(np.isfinite(power) & (power >= 0)):
        raise InputError("noise density must be finite and not negative everywhere")
    scale = np.sqrt(power * (sample_rate * piece / 4.0)).astype(dtype)
    scale[0] = 0.0
    turn = 0.5 * np.pi * (np.arange(fade) + 0.5) / fade
    ramp = np.sin(0.5 * np.pi * np.sin(turn) ** 2).astype(dtype)
    out = np.zeros(samples, dtype=dtype)
    for first in range(0, samples, piece - fade):
        part = _piece(scale, piece, rng)
        if first:
            part[:fade] *= ramp
        count = min(piece, samples - first)
        if first + piece < samples + fade:
            part[-fade:] *= ramp[::-1]
        out[first : first + count] += part[:count]
    return out


def _piece(scale: np.ndarray, piece: int, rng: np.random.Generator) -> np.ndarray:
    bins = rng.standard_normal((len(scale), 2), dtype=scale.dtype)
    bins *= scale[:, None]
    if piece % 2 == 0:
        bins[-1] = (np.sqrt(2.0) * bins[-1, 0], 0.0)
    complex_type = np.complex64 if scale.dtype == np.float32 else np.complex128
    spectrum = bins.view(complex_type)[:, 0]
    return scipy.fft.irfft(spectrum, piece, overwrite_x=True)


@dataclass(frozen=True)
class MainsPhase:
    """Phase of the 50 Hz mains, whose frequency wanders by a few hundredths of a hertz.

    f(t) = 50 + sum_i a_i cos(2 pi t / T_i + p_i), integrated in closed form. All
    channels of a site share it, as all sockets do.
    """

    deviation_hz: tuple[float, ...]
    period_s: tuple[float, ...]
    phase: tuple[float, ...]

    @classmethod
    def of(cls, seed: int) -> MainsPhase:
        """Draw the wander of a night."""
        rng = stream(seed, "mains")
        phase = tuple(rng.uniform(0, 2 * np.pi, 3).tolist())
        return cls((0.012, 0.008, 0.004), (1130.0, 287.0, 61.0), phase)

    def __call__(self, time_s: np.ndarray) -> np.ndarray:
        """Give the phase in radian at times in s."""
        total = 2 * np.pi * 50.0 * time_s
        for a, period, p in zip(
            self.deviation_hz, self.period_s, self.phase, strict=True
        ):
            total += a * period * np.sin(2 * np.pi * time_s / period + p)
        return total


def add_mains(
    values: np.ndarray,
    *,
    sample_rate: int,
    phase: MainsPhase,
    amplitudes: dict[int, float],
) -> None:
    """Add mains harmonics in place; harmonics above half the rate are left out."""
    kept = {n: a for n, a in amplitudes.items() if 50.0 * n < 0.48 * sample_rate}
    if not kept:
        return
    for first in range(0, len(values), _CHUNK):
        part = values[first : first + _CHUNK]
        base = np.exp(1j * phase((first + np.arange(len(part))) / sample_rate))
        power = base.copy()
        for n in range(1, max(kept) + 1):
            if n in kept:
                part += (kept[n] * power.real).astype(part.dtype)
            power *= base


def add_tones(
    values: np.ndarray, *, sample_rate: int, tones: dict[float, float]
) -> None:
    """Add tones of constant frequency (Hz -> amplitude) in place."""
    for first in range(0, len(values), _CHUNK):
        part = values[first : first + _CHUNK]
        time = (first + np.arange(len(part))) / sample_rate
        for frequency, amplitude in tones.items():
            part += amplitude * np.sin(2 * np.pi * frequency * time)


@dataclass(frozen=True)
class LevelDrift:
    """Slow drift of the noise level: level (1 + depth sin(2 pi t / period + phase))."""

    level: float
    depth: float
    period_s: float
    phase: float

    def __call__(self, time_s):
        """Give the factor on the amplitude at times in s."""
        turn = 2 * np.pi * np.asarray(time_s) / self.period_s + self.phase
        return self.level * (1.0 + self.depth * np.sin(turn))

    def apply(self, values: np.ndarray, *, sample_rate: int) -> None:
        """Multiply the values by the level in place."""
        for first in range(0, len(values), _CHUNK):
            part = values[first : first + _CHUNK]
            part *= self((first + np.arange(len(part))) / sample_rate)
