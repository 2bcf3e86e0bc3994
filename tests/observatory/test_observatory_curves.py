"""Spectra against published values."""

import numpy as np
import pytest
from scipy.integrate import quad

from dq.errors import InputError
from dq.observatory.channels import AUXILIARY, strain_noise, strain_seen
from dq.observatory.curves import (
    DESIGN_CURVES,
    GroundNoise,
    Resonance,
    SensorNoise,
    ground_acceleration_db,
    line_density,
    strain_density,
)

# Sathyaprakash & Schutz 2009, Living Rev. Relativity 12:2, Table 1; coefficients from
# memory, amplitude densities worked out from them apart from this code.
AMPLITUDES = [
    ("advanced_4km", 20, 4.2607e-23),
    ("advanced_4km", 50, 6.5519e-24),
    ("advanced_4km", 100, 2.8550e-24),
    ("advanced_4km", 215, 1.8166e-24),
    ("advanced_4km", 500, 5.5250e-24),
    ("advanced_4km", 1000, 1.4156e-23),
    ("first_generation_4km", 40, 2.3898e-22),
    ("first_generation_4km", 100, 3.8680e-23),
    ("first_generation_4km", 150, 3.0000e-23),
    ("first_generation_4km", 1000, 1.1519e-22),
]

# Shape at f0, same table.
SHAPES = [
    ("advanced_4km", 33.0),
    ("first_generation_4km", 1.0),
    ("first_generation_3km", 3.63003),
    ("first_generation_600m", 40.667),
    ("first_generation_300m", 32.0),
]

# Peterson 1993, US Geological Survey open-file report 93-322 (from memory): dB re
# 1 (m/s^2)^2/Hz by period in s.
PERIODS = [0.1, 0.2, 0.5, 1, 2, 5, 6, 10, 20, 100]
LOW = "-168.00 -166.70 -167.50 -166.40 -152.80 -141.10 -149.00 -163.75 -173.39 -185.07"
HIGH = "-91.50 -96.69 -115.12 -116.85 -107.06 -97.69 -100.30 -115.79 -138.50 -131.50"


@pytest.mark.reference
@pytest.mark.parametrize(("name", "frequency", "amplitude"), AMPLITUDES)
def test_design_curves_have_their_published_values(name, frequency, amplitude):
    density = DESIGN_CURVES[name](np.array(float(frequency)))
    assert np.sqrt(density) == pytest.approx(amplitude, rel=5e-5)


@pytest.mark.reference
@pytest.mark.parametrize(("name", "shape"), SHAPES)
def test_design_curves_have_their_shape_at_f0(name, shape):
    curve = DESIGN_CURVES[name]
    assert curve(curve.f0) / curve.s0 == pytest.approx(shape, rel=2e-5)


@pytest.mark.reference
def test_advanced_curve_is_quietest_at_228_hz():
    f = np.arange(100, 400, 0.01)
    amplitude = np.sqrt(DESIGN_CURVES["advanced_4km"](f))
    assert f[np.argmin(amplitude)] == pytest.approx(228.27, abs=0.02)
    assert amplitude.min() == pytest.approx(1.80039e-24, rel=1e-5)


def test_strain_density_follows_the_curve_and_is_finite_below_it():
    f = np.array([20.0, 50.0, 100.0, 1000.0])
    curve = DESIGN_CURVES["first_generation_3km"](f)
    np.testing.assert_allclose(strain_density(f), curve, rtol=5e-4)
    assert strain_density(f)[0] != curve[0]
    low = strain_density(np.array([0.0, 1.0, 4.0, 8.0]))
    assert np.all(np.isfinite(low))
    assert np.all(np.diff(low) <= 0)
    span = np.sqrt(strain_density(0.0) / strain_density(np.arange(1.0, 2048)).min())
    assert 30 < span < 300


@pytest.mark.reference
@pytest.mark.parametrize(("model", "values"), [("low", LOW), ("high", HIGH)])
def test_ground_models_have_peterson_s_values(model, values):
    expected = [float(v) for v in values.split()]
    found = ground_acceleration_db(np.array(PERIODS, dtype=float), model=model)
    np.testing.assert_allclose(found, expected, atol=0.0051)


@pytest.mark.reference
@pytest.mark.parametrize("model", ["low", "high"])
def test_ground_models_have_no_steps(model):
    period = np.geomspace(0.1, 1e5, 400_001)
    steps = np.abs(np.diff(ground_acceleration_db(period, model=model)))
    # the longest slope is 163 dB per decade, 2.5e-3 dB per step of this grid
    assert steps.max() < 0.013 + 2.5e-3


@pytest.mark.reference
@pytest.mark.parametrize(
    ("mix", "values"), [(0, (1.212e-10, 5.582e-8, 1.645e-8)), (1, (3.640e-8, 8.261e-6))]
)
def test_ground_displacement_has_peterson_s_values(mix, values):
    periods = np.array([1.0, 5.0, 10.0])[: len(values)]
    ground = GroundNoise(derivative=0, mix=mix, scale=1.0)
    np.testing.assert_allclose(np.sqrt(ground(1 / periods)), values, rtol=5e-4)


def test_velocity_is_displacement_times_angular_frequency():
    f = np.array([0.05, 0.2, 1.0, 7.0])
    ratio = GroundNoise(derivative=1)(f) / GroundNoise(derivative=0)(f)
    np.testing.assert_allclose(ratio, (2 * np.pi * f) ** 2)


def test_unknown_ground_model_is_refused():
    with pytest.raises(InputError, match="'loud' is unknown; give 'low' or 'high'"):
        ground_acceleration_db(1.0, model="loud")


@pytest.mark.parametrize("resolution", [0.0, 0.36])
def test_a_line_keeps_its_power_whatever_its_shape(resolution):
    line = Resonance(333.2, 4.0, 0.016)
    power, _ = quad(
        lambda f: float(line_density(f, line, resolution_hz=resolution)),
        233.2,
        433.2,
        points=[333.2],
        limit=500,
    )
    assert power == pytest.approx(16.0, rel=1e-3)


def test_sensor_noise_rises_below_its_knee():
    noise = SensorNoise(2.0, 10.0, 2.0)
    assert noise(np.array([10.0]))[0] == pytest.approx(8.0, rel=1e-3)
    assert noise(np.array([1e4]))[0] == pytest.approx(4.0, rel=1e-3)
    assert np.isfinite(noise(np.array([0.0]))[0])


def test_every_channel_s_spectrum_is_finite_and_positive_in_its_band():
    for spec in AUXILIARY:
        if spec.noise is None:
            continue
        f = np.arange(0, spec.rate / 2, 0.125)
        density = spec.seen(f)
        assert np.all(np.isfinite(density)), spec.name
        assert np.all(density[f >= spec.f_low_hz] > 0), spec.name


def test_lines_stand_in_the_strain_s_spectrum():
    for frequency in (50.0, 150.0, 333.2, 36.7, 1083.7):
        f = np.array([frequency, frequency + 3.0])
        near, beside = strain_seen(f) / strain_density(f)
        assert near > 20
        assert beside < 1.5
    assert strain_noise(50.0) == pytest.approx(strain_density(50.0), rel=1e-3)
