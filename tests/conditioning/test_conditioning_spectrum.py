"""Noise spectra: bias table, outside estimators, robustness, drift."""

import numpy as np
import pytest
import scipy.signal

from dq.conditioning import combine_frames, median_mean, periodograms
from dq.conditioning.spectrum import (
    frame_median_bias,
    frame_variance,
    median_bias,
    median_variance,
)

# Allen et al. 2012, Phys. Rev. D 85 122006, eq. B12; values recomputed from the sum.
BIAS = {
    1: 1.0,
    2: 1.0,
    3: 0.833333,
    4: 0.833333,
    5: 0.783333,
    7: 0.759524,
    8: 0.759524,
    9: 0.745635,
    11: 0.736544,
    15: 0.725372,
    16: 0.725372,
    31: 0.709016,
    63: 0.701021,
    64: 0.701021,
    101: 0.698073,
}


@pytest.mark.reference
@pytest.mark.parametrize(("count", "alpha"), BIAS.items())
def test_median_bias_table(count, alpha):
    assert median_bias(count) == pytest.approx(alpha, abs=5e-7)


def test_median_bias_and_variance_are_those_of_simulated_medians(rng):
    for count in (3, 8, 15, 16):
        medians = np.median(rng.exponential(size=(200_000, count)), axis=1)
        assert medians.mean() == pytest.approx(median_bias(count), rel=4e-3)
        relative = medians.var() / medians.mean() ** 2
        assert relative == pytest.approx(median_variance(count), rel=2e-2)


def test_relative_spread_at_fifteen_segments():
    # 0.361 against 0.258 for the mean: price of robustness (recomputed)
    assert np.sqrt(median_variance(15)) == pytest.approx(0.361, abs=1e-3)


@pytest.mark.reference
def test_agrees_with_the_library_median_estimator(rng):
    """scipy.signal.welch(average='median') on the same segments."""
    rate, segment = 512.0, 1024
    sos = scipy.signal.butter(2, 60, fs=rate, output="sos")
    x = scipy.signal.sosfilt(sos, rng.standard_normal(int(rate * 200)))
    power = periodograms(x, sample_rate=rate, segment=segment, hop=segment // 2)
    window = scipy.signal.get_window("hann", segment) ** 2
    options = {"nperseg": segment, "detrend": False, "window": window}
    _, theirs = scipy.signal.welch(x, rate, average="median", **options)
    ours = median_mean(power)
    # same segments, other grouping: equal within the scatter of two medians
    ratio = (ours / theirs)[5:-5]
    assert np.mean(ratio) == pytest.approx(1.0, abs=0.01)
    assert np.std(ratio) < 0.12
    # the mean of our periodograms is Welch's mean to rounding
    _, mean = scipy.signal.welch(x, rate, **options)
    # single precision: an error relative to the segment's whole power
    atol = 1e-10 * mean.max()
    np.testing.assert_allclose(power.mean(axis=0), mean, rtol=1e-4, atol=atol)


def test_median_mean_is_unbiased_and_hardly_moved_by_a_transient(rng):
    rate, segment = 256.0, 512
    x = rng.standard_normal(int(rate * 64))
    quiet = median_mean(
        periodograms(x, sample_rate=rate, segment=segment, hop=segment // 2)
    )
    assert np.mean(quiet[2:-2]) == pytest.approx(2 / rate, rel=0.02)
    loud = x.copy()
    loud[5000:5100] += 1e4 * rng.standard_normal(100)
    spectrum = median_mean(
        periodograms(loud, sample_rate=rate, segment=segment, hop=segment // 2)
    )
    assert np.mean(spectrum[2:-2]) / np.mean(quiet[2:-2]) < 1.15


def test_short_data_give_no_periodogram():
    assert periodograms(np.zeros(9), sample_rate=1, segment=10, hop=5).shape == (0, 6)


def test_bias_of_a_median_of_frames(rng):
    for frames in (3, 4, 5, 6):
        draws = rng.gamma(15, 1 / 15, size=(400_000, frames))
        mean = frame_median_bias(frames, 15.0)
        assert np.median(draws, axis=1).mean() == pytest.approx(mean, rel=1e-3)
        assert mean < 0.995


def test_combined_frames_are_unbiased(rng):
    for segments in (9, 32):
        power = rng.exponential(size=(5, segments, 20_000))
        spectrum = combine_frames([median_mean(p) for p in power], [segments] * 5)
        assert spectrum.mean() == pytest.approx(1, abs=0.004)


def test_frame_variance_is_that_of_a_median_mean(rng):
    for segments in (15, 30, 32):
        frames = median_mean(rng.exponential(size=(segments, 50_000)))
        assert frames.var() == pytest.approx(frame_variance(segments), rel=0.08)


def test_one_disturbed_frame_does_not_become_the_norm(rng):
    frames = [median_mean(rng.exponential(size=(32, 2000))) for _ in range(5)]
    quiet = combine_frames(frames, [32] * 5)
    frames[2] = frames[2] * 100
    disturbed = combine_frames(frames, [32] * 5)
    assert disturbed.mean() / quiet.mean() < 1.15


def test_few_short_frames_are_averaged_by_their_counts(rng):
    frames = [np.full(3, 1.0), np.full(3, 4.0)]
    spectrum = combine_frames(frames, [30, 10])
    np.testing.assert_allclose(spectrum, 1.75)
