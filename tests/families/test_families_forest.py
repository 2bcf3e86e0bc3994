"""The forest as arrays against scikit-learn's own; calibration of its votes."""

import dataclasses

import numpy as np
import pytest
from sklearn.calibration import CalibratedClassifierCV
from sklearn.datasets import load_digits
from sklearn.ensemble import ExtraTreesClassifier, RandomForestClassifier
from sklearn.frozen import FrozenEstimator

from dq.families.calibration import METHODS, choose_map, fit_map, mapped_out_of_fold
from dq.families.clouds import fit_clouds
from dq.families.forest import pack
from dq.families.novelty import chimeras
from dq.families.scores import brier, calibration_error, one_hot
from dq.families.space import REACH, fit_space
from dq.families.trust import borne_out, contradicted


@pytest.fixture(scope="module")
def digits():
    x, y = load_digits(return_X_y=True)
    x = x.astype(float)
    x[np.random.default_rng(1).random(x.shape) < 0.05] = np.nan
    return x, y


@pytest.mark.reference
@pytest.mark.parametrize("kind", [RandomForestClassifier, ExtraTreesClassifier])
def test_votes_are_scikit_learns(digits, kind):
    x, y = digits
    grown = kind(20, random_state=0, class_weight="balanced").fit(x[:900], y[:900])
    forest = pack(grown.estimators_, grown.classes_, 10)
    # leaves are kept in float32
    np.testing.assert_allclose(
        forest.vote(x[900:]), grown.predict_proba(x[900:]), atol=1e-6
    )
    assert forest.faults(64) == ""


def test_a_family_that_a_training_side_lacks_gets_no_votes(digits):
    x, y = digits
    some = y < 9
    grown = RandomForestClassifier(5, random_state=0).fit(x[some], y[some] + 1)
    votes = pack(grown.estimators_, grown.classes_, 11).vote(x)
    assert np.all(votes[:, [0, 10]] == 0)
    np.testing.assert_allclose(votes.sum(axis=1), 1.0)


@pytest.mark.parametrize(
    ("name", "change", "fault"),
    [
        ("left", lambda a: np.where(a > 0, 10**6, a), "out of its tree"),
        ("right", lambda a: np.zeros_like(a), "out of its tree"),
        ("feature", lambda a: a + 64, "does not exist"),
        ("votes", lambda a: 2 * a, "sum to 1"),
        ("votes", lambda a: a[:1], "leaf without votes"),
        ("roots", lambda a: a - 1, "without root"),
        ("threshold", lambda a: a[1:], "unequal length"),
    ],
)
def test_arrays_that_would_lead_astray_are_found(digits, name, change, fault):
    x, y = digits
    grown = RandomForestClassifier(3, random_state=0).fit(x, y)
    forest = pack(grown.estimators_, grown.classes_, 10)
    broken = dataclasses.replace(forest, **{name: change(getattr(forest, name))})
    assert fault in broken.faults(64)


def drawn_votes(rng, count=4000):
    """Give votes whose calibrated probabilities are known: p = softmax(2.5 ln v)."""
    votes = rng.dirichlet([0.8, 0.8, 0.8], count)
    votes = np.clip(votes, 1e-3, None)
    votes /= votes.sum(axis=1, keepdims=True)
    true = votes**2.5
    true /= true.sum(axis=1, keepdims=True)
    truth = (rng.random(count)[:, None] > np.cumsum(true, axis=1)).sum(axis=1)
    return votes, true, truth


def test_the_planted_temperature_comes_back(rng):
    votes, true, truth = drawn_votes(rng)
    found = fit_map("temperature", votes, truth, np.ones(len(truth)))
    assert found.parameters[0] == pytest.approx(2.5, abs=0.1)
    assert np.abs(found(votes) - true).max() < 0.02


@pytest.mark.parametrize("method", METHODS[1:])
def test_every_map_mends_what_is_bent(rng, method):
    votes, _, truth = drawn_votes(rng)
    half = len(truth) // 2
    target = one_hot(truth[half:], np.arange(3))
    found = fit_map(method, votes[:half], truth[:half], np.ones(half))(votes[half:])
    np.testing.assert_allclose(found.sum(axis=1), 1.0)
    assert brier(found, target) < brier(votes[half:], target)
    before = calibration_error(
        votes[half:].max(axis=1), votes[half:].argmax(axis=1) == truth[half:]
    )
    after = calibration_error(found.max(axis=1), found.argmax(axis=1) == truth[half:])
    assert before > 0.1
    assert after < 0.03


def test_the_best_held_out_map_is_kept(rng):
    votes, _, truth = drawn_votes(rng, 1500)
    fold = np.arange(1500) % 5
    method, scores = choose_map(votes, truth, fold, np.ones(1500))
    assert method == min(scores, key=scores.get) == "temperature"
    again = mapped_out_of_fold(method, votes, truth, fold, np.ones(1500))
    assert brier(again, one_hot(truth, np.arange(3))) == pytest.approx(scores[method])


@pytest.mark.reference
def test_isotonic_is_scikit_learns(digits):
    x, y = (np.nan_to_num(digits[0]), digits[1] % 3)
    grown = RandomForestClassifier(50, random_state=0).fit(x[:600], y[:600])
    theirs = CalibratedClassifierCV(FrozenEstimator(grown), method="isotonic")
    theirs.fit(x[600:1200], y[600:1200])
    ours = fit_map(
        "isotonic", grown.predict_proba(x[600:1200]), y[600:1200], np.ones(600)
    )
    votes = grown.predict_proba(x[1200:])
    np.testing.assert_allclose(ours(votes), theirs.predict_proba(x[1200:]), atol=0.03)


def test_chimeras_take_usual_values_from_two_families(rng):
    x = np.c_[np.repeat([0.0, 1.0], 50), np.repeat([10.0, 11.0], 50), rng.random(100)]
    family = np.repeat([0, 1], 50)
    mixed = chimeras(x, family, 400, rng=rng)
    assert np.isin(mixed, x).all()
    # most hold the first value of one family beside the second of the other
    assert (mixed[:, 0] != mixed[:, 1] - 10).mean() > 0.3
    assert len(chimeras(x[:50], family[:50], 10, rng=rng)) == 0


def test_distances_are_mahalanobis_where_families_are_normal(rng):
    """Closed form: a member lies at 1 per feature, one k spreads off at k squared."""
    family = np.repeat([0, 1], 4000)
    x = rng.normal(size=(8000, 4)) + np.where(family, 3.0, 0.0)[:, None]
    clouds = fit_clouds(x, family, families=3)
    distance = np.exp(clouds.distances(x))
    assert distance.shape == (8000, 3)
    np.testing.assert_allclose(distance[family == 0, 0].mean(), 1.0, atol=0.15)
    np.testing.assert_allclose(distance[family == 1, 1].mean(), 1.0, atol=0.15)
    assert distance[family == 0, 1].mean() > 4 < distance[family == 1, 0].mean()
    # a family without examples lies around the middle of all
    np.testing.assert_allclose(clouds.centre[2], 0.0, atol=0.05)


def test_labels_are_doubted_where_votes_contradict_them():
    votes = np.array([[0.9, 0.1, 0.0], [0.85, 0.05, 0.1], [0.55, 0.05, 0.4]])
    truth = np.array([0, 1, 1])
    assert contradicted(votes, truth).tolist() == [False, True, False]
    many = np.repeat(votes[[0, 1, 0]], [8, 2, 0], axis=0)
    told = np.array([0] * 6 + [1] * 2 + [1] * 2)
    # all of family 1 is doubtful: a family that is hard to tell keeps its examples
    assert borne_out(many, told).all()
    told = np.array([0] * 8 + [0, 2])
    many[9] = [0.0, 0.2, 0.8]
    many[8] = [0.1, 0.9, 0.0]
    assert borne_out(many, told).tolist() == [True] * 8 + [False, True]


def test_space_centres_scales_and_bears_odd_columns(rng):
    x = np.c_[
        rng.normal(5, 2, 4000),
        np.full(4000, 3.0),
        np.full(4000, np.nan),
        rng.normal(size=4000),
    ]
    x[0, 3] = 1e12
    space = fit_space(x)
    np.testing.assert_allclose(space.centre[:3], [5, 3, 0], atol=0.1)
    np.testing.assert_allclose(space.spread, [2, 1, 1, 1], atol=0.1)
    placed = space.place(x)
    assert np.isfinite(placed).all()
    assert placed[0, 3] == REACH
