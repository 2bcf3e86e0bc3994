"""Optimal SNR against closed forms and a direct numerical integral."""

import numpy as np
import pytest
from scipy.integrate import quad

from dq.observatory import waveforms as wf
from dq.observatory.curves import strain_density
from dq.observatory.snr import NoiseModel

RATE = 4096


def flat(level):
    return lambda f: np.full_like(f, level**2)


def sampled(frequency, q, *, phase=0.0, at=0.0, half=1.0):
    time = np.arange(-half, half, 1 / RATE)
    wave = wf.sine_gaussian(time - at, frequency_hz=frequency, q=q, phase=phase)
    return wave, -half


# Sutton 2013: in white noise rho = sqrt(2) h_rss / sqrt(S).
@pytest.mark.reference
@pytest.mark.parametrize(
    ("frequency", "q", "amplitude", "level", "rho"),
    [
        (100, 9, 8.87557e-21, 1e-22, 14.1421),
        (250, 3, 2.43082e-21, 1e-23, 14.1421),
        (1000, 100, 8.42010e-21, 5e-23, 28.2843),
    ],
)
def test_snr_of_a_sine_gaussian_in_white_noise(frequency, q, amplitude, level, rho):
    model = NoiseModel(flat(level), sample_rate=RATE, f_low_hz=1.0)
    wave, _ = sampled(frequency, q)
    assert model.snr(amplitude * wave) == pytest.approx(rho, rel=2e-4)


@pytest.mark.parametrize(("frequency", "q"), [(30, 3), (100, 9), (400, 1.0), (60, 40)])
def test_snr_equals_a_direct_integral_in_coloured_noise(frequency, q):
    tau = q / (np.sqrt(2) * np.pi * frequency)

    def integrand(f):
        near = np.exp(-((np.pi * tau * (f - frequency)) ** 2))
        far = np.exp(-((np.pi * tau * (f + frequency)) ** 2))
        return np.pi * tau**2 / 4 * (near - far) ** 2 / float(strain_density(f)) * 4e-42

    expected, _ = quad(integrand, 10, 0.45 * RATE, points=[frequency], limit=400)
    model = NoiseModel(strain_density, sample_rate=RATE, f_low_hz=10.0)
    wave, _ = sampled(frequency, q, half=2.0)
    assert model.snr(1e-21 * wave) == pytest.approx(np.sqrt(expected), rel=2e-3)


def test_peak_lies_where_the_waveform_was_put():
    model = NoiseModel(strain_density, sample_rate=RATE, f_low_hz=10.0)
    wave, first = sampled(180.0, 8.0, at=0.2137, phase=1.0)
    found = model.measure(1e-20 * wave, first_s=first)
    assert found.peak_s == pytest.approx(0.2137, abs=2 / RATE)
    assert found.start_s < 0.2137 < found.end_s
    assert found.frequency_hz == pytest.approx(180.0, rel=0.05)


def test_start_and_end_hold_99_percent_of_the_energy():
    model = NoiseModel(flat(1.0), sample_rate=RATE, f_low_hz=1.0)
    wave, first = sampled(200.0, 20.0)
    found = model.measure(wave, first_s=first)
    # energy envelope is a normal law of sigma tau / 2; 99 % lie within 2.5758 sigma
    tau = 20 / (np.sqrt(2) * np.pi * 200)
    assert found.end_s - found.start_s == pytest.approx(2.5758 * tau, abs=3 / RATE)


def test_snr_grows_with_amplitude_and_falls_with_noise():
    wave, _ = sampled(100.0, 9.0)
    quiet = NoiseModel(flat(1.0), sample_rate=RATE, f_low_hz=1.0)
    loud = NoiseModel(flat(2.0), sample_rate=RATE, f_low_hz=1.0)
    assert quiet.snr(3 * wave) == pytest.approx(3 * quiet.snr(wave))
    assert loud.snr(wave) == pytest.approx(quiet.snr(wave) / 2)


def test_energy_below_the_band_does_not_count():
    wave, _ = sampled(30.0, 20.0)
    model = NoiseModel(flat(1.0), sample_rate=RATE, f_low_hz=60.0)
    assert model.snr(wave) < 1e-6
