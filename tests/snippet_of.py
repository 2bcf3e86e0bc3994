"""Snippets of known waveforms in white noise, for tests of the features."""

from __future__ import annotations

import numpy as np

from dq.features import Snippet, stretch_around

RATE = 2048.0


def snippet_of(
    wave,
    *,
    snr: float,
    start_s: float,
    end_s: float,
    f_low_hz: float,
    f_high_hz: float,
    rng=None,
    rate: float = RATE,
    flat_s: float = 0.0,
) -> Snippet:
    """Give the snippet of ``wave(t)`` with a transient in [start_s, end_s).

    ``wave`` is a function of the time in s; without a generator there is no noise.
    """
    first, length, start, end = stretch_around(0.5 * (start_s + end_s), start_s, end_s)
    n = round(length * rate)
    first = round(first * rate) / rate
    t = first + np.arange(n) / rate
    values = wave(t)
    values = values * (snr / np.sqrt(np.sum(values**2)))
    if rng is not None:
        values = values + rng.standard_normal(n)
    grid = np.linspace(0.0, rate / 2, 513)
    return Snippet(
        values=values.astype(np.float32),
        sample_rate=rate,
        length_s=length,
        start_s=start - first,
        end_s=end - first,
        f_low_hz=f_low_hz,
        f_high_hz=f_high_hz,
        frequency=grid,
        density=np.ones(len(grid)),
        flat_s=flat_s,
    )
