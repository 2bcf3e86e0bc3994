"""Levels in octave bands against closed forms, other filters and a real record."""

import numpy as np
import pytest
import scipy.signal

from dq.motion import band_rms, octave_bands, plan_bands
from dq.motion.filters import Halvings, correlate

#: Number of the first sample: a GPS time in samples, so that cells lie on the grid.
GPS = 1_420_000_000


def levels(values, rate, low=0.0625, high=16.0, start=GPS):
    """Give {(low, high): (cell starts in s, levels)} of one stretch."""
    stretch = Halvings(values, round(start * rate))
    out = {}
    for plan in plan_bands(octave_bands(low, high, rate)[::-1], rate):
        first, level = band_rms(stretch, plan, rate)
        out[plan.low_hz, plan.high_hz] = (
            (first + np.arange(len(level))) * plan.cell_s,
            level,
        )
    return out


@pytest.mark.parametrize("rate", [32.0, 50.0, 100.0, 256.0])
def test_a_tone_in_the_middle_of_a_band_has_its_amplitude_over_root_two(rate):
    for low, high in octave_bands(0.0625, 16.0, rate):
        for frequency in (1.3 * low, np.sqrt(low * high), 1.7 * low):
            t = np.arange(int(40 / low * rate)) / rate
            tone = 3.0 * np.sin(2 * np.pi * frequency * t + 0.3)
            found = levels(tone, rate)[low, high][1]
            assert len(found) > 5
            np.testing.assert_allclose(found, 3.0 / np.sqrt(2), rtol=1e-3)


def test_a_tone_an_octave_away_is_a_thousandth():
    rate, t = 64.0, np.arange(64 * 200) / 64.0
    for frequency in (0.35, 3.0):
        tone = np.sin(2 * np.pi * frequency * t)
        found = levels(tone, rate, low=0.75)[0.75, 1.5][1]
        assert found.max() < 1.2e-3


def test_white_noise_has_root_of_density_times_bandwidth(rng):
    rate, density = 64.0, 2.5
    values = rng.standard_normal(int(rate * 40_000)) * np.sqrt(density * rate / 2)
    for (low, high), (_, level) in levels(values, rate).items():
        # relative scatter of a mean power is 1 / sqrt(bandwidth x time)
        tolerance = 4 / np.sqrt((high - low) * 40_000) + 0.002
        assert np.mean(level**2) == pytest.approx(density * (high - low), rel=tolerance)


def smoothed_squares(values, rate, plan, start):
    """Give the level that a band-passed series has, by the plan's cells and weights."""
    side = len(plan.weights) // 2
    index = np.round((start - GPS) / plan.cell_s).astype(int)
    width = round(plan.cell_s * rate)
    cells = range(index[0] - side, index[-1] + side + 1)
    mean = [np.mean(values[k * width : (k + 1) * width] ** 2) for k in cells]
    return np.sqrt(np.convolve(mean, plan.weights, mode="valid"))


def test_levels_agree_with_scipy(rng):
    # outside references: scipy.signal.welch for the mean power in the band, and
    # scipy.signal.sosfiltfilt (Butterworth, both ways) for its course in time
    rate = 32.0
    values = np.cumsum(rng.standard_normal(int(rate * 20_000)))
    f, density = scipy.signal.welch(values, rate, nperseg=8192)
    for plan in plan_bands(octave_bands(0.25, 4.0, rate), rate):
        low, high = plan.low_hz, plan.high_hz
        start, level = levels(values, rate)[low, high]
        power = np.sum(density[(f >= low) & (f < high)]) * f[1]
        assert np.mean(level**2) == pytest.approx(power, rel=0.04)
        sos = scipy.signal.butter(6, [low, high], "bandpass", fs=rate, output="sos")
        other = scipy.signal.sosfiltfilt(sos, values)
        course = smoothed_squares(other, rate, plan, start)
        # its flanks are twice as steep, so the courses differ by a little noise
        assert np.corrcoef(level, course)[0, 1] > 0.85


@pytest.mark.reference
def test_levels_of_a_real_earthquake_agree_with_obspy():
    obspy = pytest.importorskip("obspy")
    # outside reference: the record of a local earthquake in obspy's wheel and its own
    # band-pass (Butterworth, both ways)
    trace = obspy.read()[0]
    rate = trace.stats.sampling_rate
    found = levels(trace.data.astype(float), rate)
    for plan in plan_bands([(1.0, 2.0), (2.0, 4.0), (4.0, 8.0), (8.0, 16.0)], rate):
        low, high = plan.low_hz, plan.high_hz
        start, level = found[low, high]
        own = trace.copy()
        own.filter("bandpass", freqmin=low, freqmax=high, corners=6, zerophase=True)
        course = smoothed_squares(own.data, rate, plan, start)
        assert np.sqrt(np.mean(level**2)) == pytest.approx(
            np.sqrt(np.mean(course**2)), rel=0.1
        )
        assert np.corrcoef(np.log(level), np.log(course))[0, 1] > 0.97
        assert abs(np.argmax(level) - np.argmax(course)) <= 1


def test_a_sample_touches_levels_within_the_reach_only(rng):
    rate = 64.0
    values = rng.standard_normal(int(rate * 600))
    changed = values.copy()
    changed[len(values) // 2] += 1e6
    at = GPS + 300.0
    for plan in plan_bands(octave_bands(0.0625, 16.0, rate)[::-1], rate):
        first, one = band_rms(Halvings(values, round(GPS * rate)), plan, rate)
        _, two = band_rms(Halvings(changed, round(GPS * rate)), plan, rate)
        start = (first + np.arange(len(one))) * plan.cell_s
        far = (start > at + plan.reach_s) | (start + plan.cell_s < at - plan.reach_s)
        assert np.array_equal(one[far], two[far])
        assert far.any()
        assert np.all(two[np.abs(start - at) < plan.cell_s] > 1e3)


def test_an_offset_and_a_ramp_leave_no_level():
    rate = 32.0
    t = np.arange(int(rate * 900)) / rate
    for found in levels(1e6 + 0 * t, rate).values():
        assert np.all(found[1] == 0.0)
    ramp = levels(5.0 * t, rate)
    for (low, high), (_, level) in ramp.items():
        assert level.max() < 1e-3 * 5.0 / low, (low, high)


def test_levels_do_not_depend_on_where_the_stretch_begins(rng):
    rate = 100.0
    values = rng.standard_normal(int(rate * 900))
    whole = levels(values, rate)
    part = levels(values[12_345:70_001], rate, start=GPS + 123.45)
    for band, (start, level) in part.items():
        index = np.searchsorted(whole[band][0], start)
        assert np.array_equal(whole[band][0][index], start)
        np.testing.assert_allclose(whole[band][1][index], level, rtol=1e-9)


@pytest.mark.parametrize(("length", "step"), [(1, 1), (25, 2), (49, 4), (59, 1)])
def test_the_fast_correlation_equals_its_slow_twin(rng, length, step):
    for samples in (0, length - 1, length, length + step, 700):
        values, taps = rng.standard_normal(samples), rng.standard_normal((length, 2))
        count = max((samples - length) // step + 1, 0)
        slow = np.zeros((count, 2))
        for k in range(count):
            for j in range(length):
                slow[k] += taps[j] * values[k * step + j]
        np.testing.assert_allclose(correlate(values, taps, step), slow, atol=1e-12)


def test_octaves_end_where_rate_or_bound_ends():
    assert octave_bands(0.0625, 16.0, 256.0)[-1] == (8.0, 16.0)
    assert octave_bands(0.0625, 16.0, 32.0)[-1] == (4.0, 8.0)
    assert octave_bands(0.0625, 16.0, 0.4) == []
    assert len(octave_bands(0.0625, 16.0, 256.0)) == 8


def test_too_short_a_stretch_has_no_level():
    assert all(len(v[1]) == 0 for v in levels(np.ones(3), 64.0).values())
