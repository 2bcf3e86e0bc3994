"""Scores, agreement and conformal ranks against published and library values."""

import numpy as np
import pytest
from scipy import stats
from sklearn import metrics

from dq.families import scores
from dq.families.conformal import (
    conformal_bar,
    conformal_rank,
    family_bars,
    sets_below,
)

#: Cohen 1960, Educ. Psychol. Meas. 20 37, two judges' counts (from memory).
COHEN = np.array([[88, 14, 18], [10, 40, 10], [2, 6, 12]])


@pytest.mark.reference
def test_kappa_of_cohens_own_example():
    assert scores.kappa(COHEN) == pytest.approx(58 / 118, abs=1e-12)
    # Cohen 1968, Psychol. Bull. 70 213 (from memory): 1 - 0.90 / 1.38
    weights = np.array([[0, 1, 3], [1, 0, 6], [3, 6, 0]])
    assert scores.kappa(COHEN, weights) == pytest.approx(0.347826, abs=5e-7)


@pytest.mark.reference
def test_kappa_is_scikit_learns():
    first = np.repeat([0, 1, 2], COHEN.sum(axis=1))
    second = np.concatenate([np.repeat([0, 1, 2], row) for row in COHEN])
    assert scores.kappa(COHEN) == pytest.approx(
        metrics.cohen_kappa_score(first, second), abs=1e-12
    )


def test_kappa_without_any_disagreement_possible_is_unknown():
    assert np.isnan(scores.kappa(np.array([[5]])))
    assert scores.kappa(np.diag([4, 7])) == 1.0


@pytest.mark.reference
def test_brier_and_log_loss_of_worked_values():
    # Brier 1950, Mon. Weather Rev. 78 1: the score; the numbers are worked by hand
    assert scores.brier([0.9, 0.8, 0.3, 0.1], [1, 1, 0, 0]) == pytest.approx(0.0375)
    p = np.array([[0.7, 0.2, 0.1], [0.2, 0.5, 0.3], [0.1, 0.6, 0.3]])
    truth = np.eye(3)
    each = [scores.brier(p[[i]], truth[[i]]) for i in range(3)]
    np.testing.assert_allclose(each, [0.14, 0.38, 0.86], atol=1e-12)
    assert scores.brier(p, truth) == pytest.approx(0.46)
    assert scores.log_loss(p, truth) == pytest.approx(0.751265, abs=5e-7)
    assert scores.log_loss(p, truth) == pytest.approx(
        metrics.log_loss([0, 1, 2], p), abs=1e-12
    )


@pytest.mark.reference
def test_calibration_error_of_a_worked_value():
    # Naeini, Cooper & Hauskrecht 2015, AAAI, 2901: the score
    confidence = np.repeat([0.9, 0.6], 10)
    right = np.r_[np.arange(10) < 8, np.arange(10) < 6]
    assert scores.calibration_error(confidence, right) == pytest.approx(0.05)
    table = scores.reliability(confidence, right)
    assert table["count"].tolist() == [10, 10]
    assert table["right"].tolist() == [6, 8]
    assert np.isnan(scores.calibration_error(np.zeros(0), np.zeros(0)))


def test_reliability_holds_every_example_once(rng):
    confidence = np.r_[rng.random(500), 0.0, 1.0, 0.1, 0.2]
    table = scores.reliability(confidence, rng.random(504) < confidence)
    assert table["count"].sum() == 504
    assert (table["accuracy_low"] <= table["accuracy"]).all()
    assert (table["accuracy"] <= table["accuracy_high"]).all()


@pytest.mark.reference
@pytest.mark.parametrize(
    ("count", "alpha", "rank", "mean", "deviation"),
    [
        (9, 0.1, 9, 0.9, 0.0905),
        (100, 0.1, 91, 0.90099, 0.02957),
        (500, 0.1, 451, 0.90020, 0.01338),
        (1000, 0.1, 901, 0.90010, 0.00947),
        (1000, 0.05, 951, 0.95005, 0.00688),
    ],
)
def test_conformal_rank_and_its_coverage_law(count, alpha, rank, mean, deviation):
    # Vovk, Gammerman & Shafer 2005: coverage ~ Beta(k, n + 1 - k)
    assert conformal_rank(count, alpha) == rank
    law = stats.beta(rank, count + 1 - rank)
    assert law.mean() == pytest.approx(mean, abs=6e-6)
    assert law.std() == pytest.approx(deviation, abs=6e-5)


def test_coverage_follows_the_law(rng):
    """Planted: over many calibration sets the coverage is Beta(91, 10)."""
    covered = [conformal_bar(rng.random(100), 0.1) for _ in range(400)]
    assert stats.kstest(covered, stats.beta(91, 10).cdf).pvalue > 0.01
    assert stats.kstest(covered, stats.beta(85, 16).cdf).pvalue < 1e-4


def test_too_few_examples_exclude_nothing():
    assert conformal_bar(np.arange(8.0), 0.1) == np.inf
    assert conformal_bar(np.arange(9.0), 0.1) == 8.0


def test_each_family_sets_its_own_bar():
    strange = np.array([[0.1, 0.9], [0.3, 0.7], [0.8, 0.2], [0.6, 0.6]])
    bars = family_bars(strange, np.array([0, 0, 1, 1]), 0.5)
    np.testing.assert_allclose(bars, [0.3, 0.6])
    held = sets_below(strange, bars)
    assert held.tolist() == [[True, False], [True, False], [False, True], [False, True]]
