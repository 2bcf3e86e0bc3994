"""Whitening: white in white out, coloured noise becomes white, exact settling."""

import numpy as np
import pytest

from dq.conditioning import (
    combine_frames,
    design_whitening,
    median_mean,
    periodograms,
    whitened_spectrum,
)
from dq.conditioning.whiten import difference, difference_response, high_pass
from dq.tiles import band_weights, plan_tiles, row_coefficients

RATE = 1024
SEGMENT = 4 * RATE
LENGTH = 72 * RATE


def coloured(rng, seconds, density):
    """Make Gaussian noise of a one-sided density (callable of Hz)."""
    n = seconds * RATE
    f = np.fft.rfftfreq(n, 1 / RATE)
    f[0] = f[1]
    z = rng.standard_normal(len(f)) + 1j * rng.standard_normal(len(f))
    return np.fft.irfft(z * np.sqrt(density(f) * RATE * n) / 2, n)


def filter_for(x, edge=5.0):
    """Measure five frames of x and design the filter."""
    y = difference(x)
    frames = []
    for k in range(5):
        part = y[k * 64 * RATE : (k * 64 + 66) * RATE]
        frames.append(
            median_mean(
                periodograms(part, sample_rate=RATE, segment=SEGMENT, hop=SEGMENT // 2)
            )
        )
    spectrum = combine_frames(frames, [32] * 5)
    return design_whitening(
        spectrum,
        sample_rate=RATE,
        segment=SEGMENT,
        half_length=2 * RATE,
        edge_hz=edge,
    )


def flat(f):
    return np.full_like(f, 2 / RATE)


def design_curve(f):
    """First-generation 3 km noise, Sathyaprakash & Schutz 2009 (from memory).

    Living Rev. Relativity 12:2, Table 1.
    """
    x = np.maximum(f, 8.0) / 500
    return 3.2e-46 * ((7.8 * x) ** -5 + 2 / x + 0.63 + x**2)


def with_lines(f):
    peaks = sum(1e4 / (1 + ((f - f0) / 0.02) ** 2) for f0 in (50, 150, 300))
    return design_curve(f) * (1 + peaks)


@pytest.mark.parametrize("density", [flat, design_curve], ids=["white", "design"])
def test_noise_comes_out_white_with_unit_variance(rng, density):
    x = coloured(rng, 340, density)
    whitening = filter_for(x)
    series = []
    for k in range(4):
        spectrum = whitened_spectrum(
            x[k * 64 * RATE : k * 64 * RATE + LENGTH],
            0,
            LENGTH,
            whitening,
            sample_rate=RATE,
        )
        time = np.fft.irfft(spectrum, LENGTH) * np.sqrt(LENGTH)
        series.append(time[4 * RATE : 68 * RATE])
    white = np.concatenate(series)
    f = np.fft.rfftfreq(8 * RATE, 1 / RATE)
    inside = (f > 12) & (f < 500)
    power = np.abs(np.fft.rfft(white.reshape(-1, 8 * RATE), axis=1)) ** 2
    level = power.mean(axis=0)[inside] / (8 * RATE)
    assert level.mean() == pytest.approx(1.0, abs=0.01)
    # flat across the band, octave by octave
    for low in (12, 25, 50, 100, 200):
        octave = (f > low) & (f < 2 * low)
        mean = (power.mean(axis=0)[octave] / (8 * RATE)).mean()
        assert mean == pytest.approx(1.0, abs=0.06)


@pytest.mark.parametrize(
    "density", [flat, design_curve, with_lines], ids=["white", "design", "lines"]
)
def test_mean_tile_energy_is_one_in_every_octave(rng, density):
    x = coloured(rng, 340, density)
    plan = plan_tiles(float(RATE), LENGTH, f_low=16)
    whitening = filter_for(x, edge=plan.f_low)
    spectra = np.stack(
        [
            whitened_spectrum(
                x[k * 64 * RATE : k * 64 * RATE + LENGTH],
                0,
                LENGTH,
                whitening,
                sample_rate=RATE,
            )
            for k in range(4)
        ]
    )
    level = band_weights(plan, whitening.frequency) @ whitening.density
    means = []
    for row in range(len(plan.q)):
        n = plan.tiles[row]
        core = slice(int(n * 4 / 72), int(n * 68 / 72))
        energy = np.abs(row_coefficients(spectra, plan, row)[:, core]) ** 2
        means.append(energy.mean() / level[row])
    means = np.array(means)
    for low in (16, 32, 64, 128, 256):
        octave = (plan.frequency > low) & (plan.frequency < 2 * low)
        assert means[octave].mean() == pytest.approx(1, abs=0.05)
    assert means[plan.frequency > 64].mean() == pytest.approx(1, abs=0.015)


def test_a_disturbance_spreads_by_the_half_length_and_no_further(rng):
    x = coloured(rng, 340, with_lines)
    whitening = filter_for(x)
    samples = np.zeros(LENGTH)
    samples[36 * RATE] = 1.0
    spectrum = whitened_spectrum(samples, 0, LENGTH, whitening, sample_rate=RATE)
    time = np.fft.irfft(spectrum.astype(complex), LENGTH)
    t = np.abs(np.arange(LENGTH) / RATE - 36)
    inside = np.abs(time[t < 2.0]).max()
    # complex64 holds seven digits; beyond the filter nothing else is left
    assert np.abs(time[t > 2.01]).max() < 3e-7 * inside
    assert np.abs(time[(t > 1.0) & (t < 2.0)]).max() > 1e-6 * inside


def test_offset_and_slope_do_not_matter(rng):
    x = coloured(rng, 340, flat)
    whitening = filter_for(x)
    options = {"sample_rate": RATE}
    plain = whitened_spectrum(x[:LENGTH], 0, LENGTH, whitening, **options)
    moved = x[:LENGTH] + 1e6 + 10 * np.arange(LENGTH)
    shifted = whitened_spectrum(moved, 0, LENGTH, whitening, **options)
    np.testing.assert_allclose(shifted, plain, atol=1e-3)


def test_difference_response_is_that_of_the_difference():
    f0 = 37.0
    t = np.arange(2000) / RATE
    x = np.sin(2 * np.pi * f0 * t + 0.4)
    np.testing.assert_allclose(
        difference(x), difference_response(f0, RATE) * x[1:-1], atol=1e-9
    )


def test_high_pass_edges():
    np.testing.assert_allclose(
        high_pass(np.array([0, 2.5, 3.75, 5, 100]), 5.0), [0, 0, 0.5, 1, 1], atol=1e-12
    )


def test_single_precision_after_whitening_costs_nothing(rng):
    """The complex64 spectrum against complex128, as tile energies."""
    x = coloured(rng, 340, design_curve)
    whitening = filter_for(x)
    spectrum = whitened_spectrum(x[:LENGTH], 0, LENGTH, whitening, sample_rate=RATE)
    plan = plan_tiles(float(RATE), LENGTH, f_low=16)
    row = len(plan.q) // 2
    single = row_coefficients(spectrum[None], plan, row)[0]
    window = np.zeros(plan.tiles[row], complex)
    part = spectrum[plan.first_bin[row] :][: len(plan.window(row))]
    window[: len(part)] = part.astype(complex) * plan.window(row)
    double = np.fft.ifft(window, norm="forward")
    core = slice(len(double) // 10, -len(double) // 10)
    error = np.abs(np.abs(single) ** 2 - np.abs(double) ** 2)[core]
    assert error.max() < 1e-4
