"""Interpolation and detrending behind the products of two channels."""

import numpy as np
import pytest
import scipy.signal

from dq.motion import detrended, interpolated
from dq.motion.product import INTERPOLATION_HALF


def test_whole_positions_come_back_unchanged(rng):
    values = rng.standard_normal(200)
    at = np.arange(INTERPOLATION_HALF, 200 - INTERPOLATION_HALF)
    np.testing.assert_allclose(interpolated(values, at.astype(float)), values[at])


@pytest.mark.parametrize("share", [0.05, 0.4, 0.8])
def test_a_tone_is_interpolated_up_to_most_of_the_band(share):
    n = np.arange(400)
    position = np.linspace(20, 380, 5001)
    angle = np.pi * share
    found = interpolated(np.sin(angle * n), position)
    # rounding to 1/1024 of a sample turns the phase by angle / 2048 at most
    np.testing.assert_allclose(found, np.sin(angle * position), atol=4e-3)


def test_interpolation_agrees_with_resampling_by_fourier(rng):
    # outside reference: scipy.signal.resample, exact for periodic band-limited series
    spectrum = np.zeros(129, complex)
    spectrum[3:90] = rng.standard_normal(87) + 1j * rng.standard_normal(87)
    values = np.fft.irfft(spectrum)
    fine = scipy.signal.resample(values, 8 * len(values))
    position = np.arange(8 * len(values)) / 8
    inside = (position > 20) & (position < len(values) - 20)
    found = interpolated(values, position[inside])
    np.testing.assert_allclose(found, fine[inside], atol=0.01 * np.std(fine))


def test_a_drift_through_the_knots_is_removed_without_a_step():
    time = np.arange(1000.0)
    knots, medians = np.array([100.0, 400.0, 700.0]), np.array([3.0, -2.0, 5.0])
    drift = np.interp(time, knots, medians)
    np.testing.assert_allclose(detrended(drift, time, knots, medians), 0.0)
    assert np.max(np.abs(np.diff(detrended(0 * time, time, knots, medians)))) < 0.03
