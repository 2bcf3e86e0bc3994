"""Grouped statistics against slow twins, numpy and scipy; neighbours by hand."""

import numpy as np
import pytest
from scipy import stats

from dq.features.context import GAP_LIMIT_S, measure_context
from dq.features.grouped import (
    entropy,
    line_fit,
    moments,
    parabola_fit,
    weighted_quantiles,
)
from dq.features.snippets import LENGTHS_S, MARGIN_S, cut_snippet, stretch_around


@pytest.fixture
def groups(rng):
    group = np.sort(rng.integers(0, 5, 200))
    return group, rng.normal(size=200), rng.uniform(0.5, 2.0, 200)


def test_moments_are_those_of_scipy(groups):
    group, key, _ = groups
    mean, deviation, skewness, kurtosis = moments(group, key, np.ones(200), 5)
    for g in range(5):
        part = key[group == g]
        assert mean[g] == pytest.approx(part.mean())
        assert deviation[g] == pytest.approx(part.std())
        assert skewness[g] == pytest.approx(stats.skew(part))
        assert kurtosis[g] == pytest.approx(stats.kurtosis(part))


def test_line_and_parabola_are_those_of_polyfit(groups, rng):
    group, x, weight = groups
    y = 0.3 - 1.2 * x + 0.4 * x**2 + 0.1 * rng.normal(size=200)
    slope, correlation = line_fit(group, x, y, weight, 5)
    middle, bend, explained = parabola_fit(group, x, y, weight, 5)
    for g in range(5):
        part = group == g
        line = np.polyfit(x[part], y[part], 1, w=np.sqrt(weight[part]))
        curve = np.polyfit(x[part], y[part], 2, w=np.sqrt(weight[part]))
        assert slope[g] == pytest.approx(line[0])
        assert (bend[g], middle[g]) == pytest.approx(tuple(curve[:2]), rel=1e-6)
        covariance = np.cov(x[part], y[part], aweights=weight[part])
        expected = covariance[0, 1] / np.sqrt(covariance[0, 0] * covariance[1, 1])
        assert correlation[g] == pytest.approx(expected)
        rest = y[part] - np.polyval(curve, x[part])
        spread = np.cov(y[part], aweights=weight[part], bias=True)
        left = np.average(rest**2, weights=weight[part])
        assert explained[g] == pytest.approx(1 - left / spread, rel=1e-6)


def test_a_group_without_spread_fits_to_nothing():
    one = np.ones(3)
    slope, correlation = line_fit(np.zeros(3, int), one, np.arange(3.0), one, 1)
    assert slope[0] == correlation[0] == 0.0


def test_quantiles_against_one_group_at_a_time(groups):
    group, key, weight = groups
    levels = (0.05, 0.5, 0.95)
    found = weighted_quantiles(group, key, weight, 5, levels)
    for g in range(5):
        k, w = key[group == g], weight[group == g]
        order = np.argsort(k)
        middle = (np.cumsum(w[order]) - 0.5 * w[order]) / w.sum()
        expected = np.interp(levels, middle, k[order])
        assert found[g] == pytest.approx(expected)


def test_a_lone_element_is_every_quantile():
    found = weighted_quantiles(
        np.array([0, 1]), np.array([3.0, 7.0]), np.ones(2), 2, (0.05, 0.95)
    )
    assert found.tolist() == [[3.0, 3.0], [7.0, 7.0]]


def test_entropy_is_that_of_scipy(rng):
    shares = rng.uniform(size=(4, 9))
    expected = stats.entropy(shares, axis=1, base=9)
    assert entropy(shares) == pytest.approx(expected)


def test_neighbours_counted_by_hand():
    every = np.array([0.0, 0.5, 3.0, 12.0, 100.0])
    pitch = np.array([100.0, 150.0, 400.0, 110.0, 100.0])
    found = measure_context(every[[0, 1, 4]], pitch[[0, 1, 4]], every, pitch)
    assert found["neighbours_1s"].tolist() == [1, 1, 0]
    assert found["neighbours_10s"].tolist() == [2, 2, 0]
    assert found["band_neighbours_10s"].tolist() == [1, 1, 0]
    assert found["gap_s"].tolist() == [0.5, 0.5, GAP_LIMIT_S]
    assert found["gap_regularity"].tolist() == [0.5 / GAP_LIMIT_S, 0.2, 1.0]


@pytest.mark.parametrize("duration", [0.0, 0.9, 1.0, 1.1, 5.0, 15.0, 40.0])
def test_a_stretch_holds_the_transient_and_its_margins(duration):
    first, length, start, end = stretch_around(0.3 * duration, 0.0, duration)
    assert length in LENGTHS_S
    assert start - first >= MARGIN_S - 1e-9
    assert first + length - end >= MARGIN_S - 1e-9
    assert start <= 0.3 * duration <= end
    if duration <= LENGTHS_S[-1] - 2 * MARGIN_S:
        assert (start, end) == (0.0, duration)


def test_a_snippet_holds_settled_samples_only():
    snippet = cut_snippet(
        np.arange(1.0, 6401.0),
        sample_rate=100.0,
        settled_s=(1.0, 60.0),
        peak_s=1.5,
        start_s=0.5,
        end_s=1.7,
        f_low_hz=10.0,
        f_high_hz=20.0,
        frequency=np.arange(3.0),
        density=np.ones(3),
    )
    assert len(snippet.values) == 200
    # the transient is cut to what is settled, the stretch begins at 1.35 - 1 s
    assert snippet.start_s == pytest.approx(0.65)
    assert snippet.end_s == pytest.approx(1.35)
    assert (snippet.values[:65] == 0).all()
    assert snippet.values[65] == 101.0
