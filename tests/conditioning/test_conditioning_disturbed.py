"""Cells that disturbances fill: the law in noise, bursts in plenty, drift kept."""

import numpy as np
import pytest
import scipy.stats

from dq.conditioning import median_mean, periodograms
from dq.conditioning.disturbed import CHANCE, GROUP, cell_bound, undisturbed
from dq.conditioning.spectrum import CORRELATED, taper

RATE, SEGMENT, SECONDS = 1024.0, 4096, 64


def powers(x):
    return periodograms(x, sample_rate=RATE, segment=SEGMENT, hop=SEGMENT // 2)


def test_the_window_correlates_as_many_bins_as_stated():
    w = taper(SEGMENT)
    exact = SEGMENT * np.sum(w**4) / np.sum(w**2) ** 2
    assert pytest.approx(exact, rel=1e-9) == CORRELATED


def test_the_bound_is_the_gamma_law_s(rng):
    """Outside: scipy.stats.gamma, and the law against tapered noise itself."""
    for bins in (8, 32, 128):
        shape = bins / CORRELATED
        theirs = scipy.stats.gamma.isf(CHANCE, shape, scale=1 / shape)
        assert cell_bound(bins, CORRELATED) == pytest.approx(theirs, rel=1e-9)
    power = powers(rng.standard_normal(int(RATE * 4000)))[:, 8:-8] * RATE / 2
    for bins in (32, 128):
        count = power.shape[1] // bins
        mean = power[:, : count * bins].reshape(-1, count, bins).mean(axis=2)
        share = np.mean(mean > cell_bound(bins, CORRELATED))
        # the gamma law is an approximation for a sum of correlated exponentials
        assert 0.4 * CHANCE < share < 4 * CHANCE


def test_noise_loses_little_and_its_level_stays(rng):
    levels, lost = [], []
    for _ in range(20):
        power = powers(rng.standard_normal(int(RATE * SECONDS)))
        used = undisturbed(power, correlated=CORRELATED)
        lost.append(0.0 if used is None else 1 - used.mean())
        levels.append(median_mean(power, None, used)[8:-8].mean() * RATE / 2)
    assert np.mean(lost) < 0.04
    assert np.mean(levels) == pytest.approx(1.0, abs=0.012)


def test_a_burst_every_twelve_seconds_hardly_moves_the_spectrum(rng):
    x = rng.standard_normal(int(RATE * SECONDS))
    t = np.arange(len(x)) / RATE
    loud = x.copy()
    for t0 in np.arange(2.0, SECONDS, 12.0):
        wave = np.exp(-(((t - t0) / 0.02) ** 2)) * np.sin(2 * np.pi * 120 * (t - t0))
        loud += 25 * wave / np.sqrt(np.sum(wave**2))
    band = slice(100 * 4, 140 * 4)
    quiet, crowded = powers(x), powers(loud)
    clean = median_mean(quiet)[band].mean()
    plain = median_mean(crowded)[band].mean() / clean
    held = undisturbed(crowded, correlated=CORRELATED)
    without = median_mean(crowded, None, held)[band].mean() / clean
    assert plain > 1.1
    assert abs(without - 1) < 0.04


def test_half_of_the_segments_are_the_noise_not_a_disturbance(rng):
    power = powers(rng.standard_normal(int(RATE * SECONDS)))
    power[: len(power) // 2] *= 4
    used = undisturbed(power, correlated=CORRELATED)
    assert used is None or used.mean() > 0.95


def test_few_segments_and_few_bins_are_left_alone(rng):
    assert undisturbed(rng.exponential(size=(7, 4096)), correlated=1.0) is None
    assert undisturbed(rng.exponential(size=(31, GROUP - 1)), correlated=1.0) is None


def test_a_masked_median_mean_equals_its_slow_twin(rng):
    power = rng.exponential(size=(9, 37))
    used = rng.random((9, 37 // GROUP)) < 0.8
    fast = median_mean(power, None, used)
    from dq.conditioning.spectrum import median_bias

    for k in range(37):
        total, weight = 0.0, 0
        for parity in (0, 1):
            values = [
                power[s, k]
                for s in range(parity, 9, 2)
                if k // GROUP >= used.shape[1] or used[s, k // GROUP]
            ]
            if values:
                total += len(values) * np.median(values) / median_bias(len(values))
                weight += len(values)
        assert fast[k] == pytest.approx(total / weight, rel=1e-12)
