"""Phase of one tile: where in its cycle a signal stands at the tile's centre."""

from __future__ import annotations

import cmath

import numpy as np

from dq.errors import PlanError
from dq.tiles.kernels import single_tile


def tile_phase(
    spectrum: np.ndarray,
    *,
    samples: int,
    sample_rate: float,
    time_s: float,
    frequency: float,
    q: float,
) -> tuple[float, float]:
    """Give the phase and the energy of the tile at a time, frequency and Q.

    Parameters
    ----------
    spectrum : ndarray of complex64, shape (samples // 2 + 1,)
        Whitened spectrum of a transform of ``samples`` samples, zero-phase filtered.
    samples : int
    sample_rate : float
        Hz.
    time_s : float
        Centre of the tile, s after the transform's first sample.
    frequency : float
        Hz, within the band that the rate carries at this Q.
    q : float
        Dimensionless.

    Returns
    -------
    phase_rad : float
        Of a signal cos(2 pi f (t - t0) + phase) under an even envelope; -pi to pi.
    energy : float
        Squared modulus, of mean 1 in noise where the spectrum's bins have mean
        square 1.

    Raises
    ------
    PlanError
        The tile reaches beyond zero frequency or half the sample rate.

    Notes
    -----
    In noise the phase errs by 1 / rho (standard deviation, rho the SNR): the noise has
    unit variance in each of two quadratures, the signal's length is rho. A time that is
    off by dt turns the phase by 2 pi f dt, so the time belongs to it.
    """
    reach = np.sqrt(11.0) * frequency / q
    if frequency <= reach or frequency + reach > 0.5 * sample_rate:
        raise PlanError(
            f"the tile at {frequency:g} Hz and Q {q:g} reaches from "
            f"{frequency - reach:g} to {frequency + reach:g} Hz; it must lie within 0 "
            f"to {0.5 * sample_rate:g} Hz, half the rate"
        )
    x = single_tile(spectrum, samples, sample_rate, time_s, frequency, q)
    # single tiles count the phase from the transform's first sample
    return cmath.phase(x * cmath.exp(2j * np.pi * frequency * time_s)), abs(x) ** 2
