"""Made noise against the spectrum that was asked for."""

import numpy as np
import pytest
from scipy.signal import welch

from dq.errors import InputError
from dq.observatory.channels import AUXILIARY, strain_noise
from dq.observatory.curves import SensorNoise
from dq.observatory.noise import (
    FADE_S,
    PIECE_S,
    LevelDrift,
    MainsPhase,
    add_mains,
    add_tones,
    coloured_noise,
    stream,
)


def white(f):
    return np.full_like(f, 2.0 / 256)


@pytest.mark.reference
def test_strain_noise_has_its_design_spectrum(rng):
    rate, seconds = 4096, 256
    noise = coloured_noise(
        strain_noise, sample_rate=rate, samples=seconds * rate, rng=rng
    )
    f, found = welch(noise, rate, nperseg=4 * rate)
    inside = (f >= 10) & (f <= 2000) & (np.abs(f - 333) > 8) & (np.abs(f - 665) > 8)
    ratio = found[inside] / strain_noise(f[inside])
    # 127 half-overlapped Hann segments: a bin scatters by 9.2 %, and bands by less
    assert np.std(ratio) == pytest.approx(0.092, rel=0.1)
    bands = [part.mean() for part in np.array_split(ratio, 20)]
    np.testing.assert_allclose(bands, 1.0, atol=0.015)


@pytest.mark.reference
@pytest.mark.parametrize("name", ["OV-GROUND-Z", "OV-MIC-NORTH", "OV-BAFFLE-POS"])
def test_auxiliary_noise_has_its_spectrum_in_single_precision(rng, name):
    spec = next(c for c in AUXILIARY if c.name == name)
    noise = coloured_noise(
        spec.noise,
        sample_rate=spec.rate,
        samples=1200 * spec.rate,
        rng=rng,
        dtype=np.float32,
    )
    assert noise.dtype == np.float32
    f, found = welch(noise.astype(float), spec.rate, nperseg=32 * spec.rate)
    inside = (f > spec.f_low_hz) & (f < 0.48 * spec.rate)
    assert np.mean(found[inside] / spec.noise(f[inside])) == pytest.approx(1, abs=0.03)


def test_noise_is_even_across_the_joins_of_its_pieces(rng):
    samples = 3 * PIECE_S * 256
    noise = coloured_noise(white, sample_rate=256, samples=samples, rng=rng)
    first = (PIECE_S - FADE_S) * 256
    join = noise[first : first + FADE_S * 256]
    # variance S f_s / 2 = 1, known within sqrt(2 / 4096)
    assert np.var(join) == pytest.approx(1.0, abs=4 * np.sqrt(2 / len(join)))
    assert np.var(noise) == pytest.approx(1.0, abs=0.01)
    neighbours = np.corrcoef(join[1:], join[:-1])[0, 1]
    assert abs(neighbours) < 4 / np.sqrt(len(join))


@pytest.mark.parametrize("samples", [1, 100, 256 * FADE_S, 256 * PIECE_S, 131_073])
def test_noise_of_any_length(rng, samples):
    noise = coloured_noise(white, sample_rate=256, samples=samples, rng=rng)
    assert len(noise) == samples
    assert np.all(noise != 0)


def test_noise_of_an_impossible_spectrum_is_refused(rng):
    with pytest.raises(InputError, match="finite and not negative"):
        coloured_noise(lambda f: 1 / f**0 - 2, sample_rate=64, samples=64, rng=rng)


def test_streams_are_independent_and_repeat():
    one = stream(3, "noise", "A").standard_normal(4)
    np.testing.assert_array_equal(one, stream(3, "noise", "A").standard_normal(4))
    assert not np.any(one == stream(3, "noise", "B").standard_normal(4))
    assert not np.any(one == stream(4, "noise", "A").standard_normal(4))


def test_mains_stand_at_harmonics_of_the_shared_phase():
    rate = 1024
    values = np.zeros(600 * rate)
    phase = MainsPhase.of(1)
    add_mains(
        values, sample_rate=rate, phase=phase, amplitudes={1: 3.0, 3: 0.5, 11: 9.0}
    )
    time = np.arange(len(values)) / rate
    expected = 3 * np.cos(phase(time)) + 0.5 * np.cos(3 * phase(time))
    # the 11th harmonic, 550 Hz, lies above half the rate
    np.testing.assert_allclose(values, expected, atol=1e-7)


def test_mains_frequency_wanders_by_hundredths_of_a_hertz():
    time = np.arange(0, 3600, 0.5)
    frequency = np.diff(MainsPhase.of(0)(time)) / (2 * np.pi * 0.5)
    assert 0.01 < np.ptp(frequency) < 0.06
    assert np.mean(frequency) == pytest.approx(50.0, abs=0.01)


def test_tones_have_their_frequency_and_amplitude():
    values = np.zeros(64 * 4096)
    add_tones(values, sample_rate=4096, tones={36.75: 2.0})
    spectrum = 2 * np.abs(np.fft.rfft(values)) / len(values)
    assert np.argmax(spectrum) == round(36.75 * 64)
    assert spectrum.max() == pytest.approx(2.0, rel=1e-9)


def test_level_drifts_by_its_depth():
    drift = LevelDrift(2.0, 0.15, 100.0, 0.0)
    values = np.ones(400 * 8)
    drift.apply(values, sample_rate=8)
    assert values.max() == pytest.approx(2.3, rel=1e-4)
    assert values.min() == pytest.approx(1.7, rel=1e-4)
    assert values[25 * 8] == pytest.approx(2.3)


def test_sensor_noise_scatters_like_its_floor(rng):
    noise = coloured_noise(SensorNoise(0.5), sample_rate=128, samples=128_000, rng=rng)
    assert np.std(noise) == pytest.approx(0.5 * np.sqrt(64), rel=0.02)
