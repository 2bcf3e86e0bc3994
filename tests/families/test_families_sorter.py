"""The estimator: scikit-learn's rules, honesty over time, sets, novelty, seeds."""

import numpy as np
import pandas as pd
import pytest
from family_table import family_table
from scipy.stats import binomtest
from sklearn.datasets import load_breast_cancer, load_wine
from sklearn.ensemble import RandomForestClassifier
from sklearn.utils.estimator_checks import estimator_checks_generator

from dq.errors import TrainingError
from dq.families import FamilySorter
from dq.families.scores import brier, calibration_error, one_hot

#: scikit-learn's checks that do not apply, with the reason.
NOT_APPLICABLE = {
    # a random forest draws by row: weights are not the same as repeated rows
    "check_sample_weight_equivalence_on_dense_data": "as RandomForestClassifier",
    "check_sample_weight_equivalence_on_sparse_data": "as RandomForestClassifier",
}


@pytest.fixture(scope="module")
def trained():
    x, y, groups = family_table(1, each=80)
    return FamilySorter(n_trees=100).fit(x, y, groups=groups)


@pytest.fixture(scope="module")
def fresh():
    return family_table(2, each=150)


@pytest.mark.reference
def test_scikit_learns_own_checks():
    sorter = FamilySorter(n_trees=8, n_folds=3)
    for estimator, check in estimator_checks_generator(sorter):
        name = getattr(check, "func", check).__name__
        if name not in NOT_APPLICABLE:
            try:
                check(estimator)
            except Exception as error:
                if type(error).__name__ not in ("SkipTest", "Skipped"):
                    raise AssertionError(f"{name}: {error}") from error


def test_probabilities_are_calibrated_on_new_epochs(trained, fresh):
    x, y, _ = fresh
    p = trained.predict_proba(x)
    np.testing.assert_allclose(p.sum(axis=1), 1.0)
    right = trained.predict(x) == y
    assert right.mean() > 0.95
    assert calibration_error(p.max(axis=1), right) < 0.03


def test_calibrated_probabilities_beat_the_votes(trained, fresh):
    x, y, _ = fresh
    truth = one_hot(y, trained.classes_)
    votes = trained.forest_.vote(x.to_numpy())
    assert brier(trained.predict_proba(x), truth) < 0.7 * brier(votes, truth)


def test_sets_keep_their_promise_in_every_family(trained, fresh):
    x, y, _ = fresh
    sets = trained.predict_set(x)
    hit = sets[np.arange(len(y)), np.searchsorted(trained.classes_, y)]
    assert 0.86 <= hit.mean() <= 0.94
    for family in trained.classes_:
        own = hit[y == family]
        assert binomtest(int(own.sum()), len(own), 0.9).pvalue > 1e-3, family
    assert sets.sum(axis=1).mean() < 1.2


def test_votes_that_tie_do_not_swell_the_sets():
    """Families far apart: nearly every member has every vote, yet a tenth is missed."""
    x, y, groups = family_table(12, each=60, spread=0.3)
    sorter = FamilySorter(n_trees=5).fit(x, y, groups=groups)
    assert (sorter.out_of_fold_.votes.max(axis=1) == 1.0).mean() > 0.4
    later, truth, _ = family_table(13, each=60, spread=0.3)
    hit = sorter.predict_set(later)[
        np.arange(len(truth)), np.searchsorted(sorter.classes_, truth)
    ]
    assert 0.84 <= hit.mean() <= 0.95


def spoilt(y, share, seed):
    """Give the families with a share of wrong ones, and which are wrong."""
    rng = np.random.default_rng(seed)
    wrong = rng.random(len(y)) < share
    others = [rng.choice([g for g in np.unique(y) if g != f]) for f in y]
    return np.where(wrong, others, y), wrong


def test_wrong_labels_are_set_aside_and_swell_no_sets(fresh):
    """Planted: 8 % wrong labels, which as members made sets of 1.5 families, 0.99."""
    x, y, groups = family_table(1, each=80)
    told, wrong = spoilt(y, 0.08, 8)
    sorter = FamilySorter(n_trees=100).fit(x, told, groups=groups)
    found = sorter.out_of_fold_.contradicted
    assert found[wrong].mean() > 0.5
    assert found[~wrong].mean() < 0.01
    later, truth, _ = fresh
    sets = sorter.predict_set(later)
    hit = sets[np.arange(len(truth)), np.searchsorted(sorter.classes_, truth)]
    assert 0.86 <= hit.mean() <= 0.97
    assert sets.sum(axis=1).mean() < 1.1


def test_wrong_labels_widen_no_cloud():
    """Planted: 8 % of names are of another family, far away; middles hardly move."""
    x, y, groups = family_table(1, each=80)
    told, _ = spoilt(y, 0.08, 8)
    right = FamilySorter(n_trees=60).fit(x, y, groups=groups)
    sorter = FamilySorter(n_trees=60).fit(x, told, groups=groups)
    moved = sorter.signs_.clouds.centre - right.signs_.clouds.centre
    assert np.abs(moved).mean() < 0.03


def test_what_is_new_lies_outside_every_set():
    x, y, groups = family_table(3, each=80)
    later, truth, _ = family_table(4, each=150)
    empty = []
    for family in ("whistle", "ring", "comb"):
        new = y == family
        sorter = FamilySorter(n_trees=60).fit(x[~new], y[~new], groups=groups[~new])
        sets = sorter.predict_set(later[truth == family])
        empty.append((~sets.any(axis=1)).mean())
    assert min(empty) > 0.9


def test_novelty_is_the_strangeness_of_the_chosen_family(trained, fresh):
    """A set never holds a family stranger than its bar; novelty orders the sets."""
    x = fresh[0].to_numpy()
    votes = trained.forest_.vote(x)
    strange = trained.tails_.combine(votes, trained.signs_.measure(x))
    assert strange.shape == votes.shape
    chosen = strange[np.arange(len(x)), votes.argmax(axis=1)]
    assert (chosen == strange.min(axis=1)).mean() > 0.97
    np.testing.assert_allclose(trained.novelty(fresh[0]) * trained.novelty_bar_, chosen)


def test_odd_tables_are_borne():
    """A family seen once, a feature never measured, one that never changes."""
    x, y, groups = family_table(14, each=20)
    x["feature_00"], x["feature_01"] = np.nan, 3.0
    y = y.copy()
    y[np.flatnonzero(y == "comb")[1:]] = "ring"
    sorter = FamilySorter(n_trees=10).fit(x, y, groups=groups)
    table = sorter.decide(x)
    assert table["novelty"].notna().all()
    # one example sets no finite bar: its family can never be excluded
    assert table["family_set"].str.contains("comb").all()
    moved = x.assign(feature_00=1.0, feature_01=-9.0)
    assert np.isfinite(sorter.novelty(moved)).all()


def test_known_examples_are_rarely_declined_and_new_ones_often():
    x, y, groups = family_table(3, each=80)
    new = y == "whistle"
    sorter = FamilySorter(n_trees=100).fit(x[~new], y[~new], groups=groups[~new])
    later, truth, _ = family_table(4, each=150)
    said = sorter.decide(later)["family"].to_numpy()
    assert (said[truth == "whistle"] == "unknown").mean() > 0.9
    assert (said[truth != "whistle"] == "unknown").mean() < 0.03


def test_decide_gives_a_table_with_the_rows_names(trained, fresh):
    x, _, _ = fresh
    part = x.iloc[::37].rename(index=lambda i: f"t{i}")
    table = trained.decide(part)
    assert list(table.columns) == ["family", "probability", "family_set", "novelty"]
    assert table.index.tolist() == part.index.tolist()
    declined = table["family"] == "unknown"
    assert (declined == (table["novelty"] > 1)).all()
    assert table.loc[declined, "probability"].isna().all()
    assert table.loc[~declined, "probability"].between(0, 1).all()
    assert list(trained.decide(x[:0]).columns) == list(table.columns)
    sets = trained.predict_set(part)
    for text, held in zip(table["family_set"], sets, strict=True):
        names = set(filter(None, text.split(";")))
        assert names == set(trained.classes_[held])


def test_an_example_far_from_everything_is_declined(trained):
    names = trained.feature_names_in_
    far = pd.DataFrame(
        np.where(np.arange(24) % 2, 40.0, -40.0)[None].repeat(3, 0), columns=names
    )
    assert trained.decide(far)["family"].tolist() == ["unknown"] * 3


def test_the_same_labels_give_the_same_sorter(trained):
    x, y, groups = family_table(1, each=80)
    again = FamilySorter(n_trees=100).fit(x, y, groups=groups)
    later, _, _ = family_table(5, each=30)
    pd.testing.assert_frame_equal(trained.decide(later), again.decide(later))
    other = FamilySorter(n_trees=100, random_state=1).fit(x, y, groups=groups)
    assert not np.array_equal(trained.predict_proba(later), other.predict_proba(later))


def test_one_block_of_time_never_stands_on_both_sides():
    """Planted: labels are noise, but examples of a block are nearly copies.

    A split by rows would call that skill; a split by blocks must see chance.
    """
    rng = np.random.default_rng(5)
    groups = np.repeat(np.arange(60), 10)
    y = rng.integers(0, 2, 60).astype(str)[groups]
    x = rng.normal(size=(60, 8))[groups] + 0.01 * rng.normal(size=(600, 8))
    honest = FamilySorter(n_trees=40).fit(x, y, groups=groups).out_of_fold_
    by_rows = FamilySorter(n_trees=40).fit(x, y).out_of_fold_
    right = honest.votes.argmax(axis=1) == honest.truth
    assert right.mean() < 0.65
    assert (by_rows.votes.argmax(axis=1) == by_rows.truth).mean() > 0.95
    for fold in np.unique(honest.fold):
        inside = set(honest.group[honest.fold == fold])
        assert not inside & set(honest.group[honest.fold != fold])


def test_copies_stay_on_their_parents_side():
    """Planted: labels are noise; copies of each example must not leak its label."""
    rng = np.random.default_rng(6)
    x = rng.normal(size=(200, 6))
    y = rng.integers(0, 2, 200).astype(str)
    copies = x + 0.01 * rng.normal(size=x.shape)
    sorter = FamilySorter(n_trees=40).fit(
        np.r_[x, copies], np.r_[y, y], parent=np.r_[np.full(200, -1), np.arange(200)]
    )
    held = sorter.out_of_fold_
    assert held.rows.tolist() == list(range(200))
    assert (held.votes.argmax(axis=1) == held.truth).mean() < 0.65


def test_copies_show_how_quiet_members_look():
    """Planted: quiet members keep a third of what marks their family."""
    rng = np.random.default_rng(7)
    marks = rng.normal(0.0, 3.0, (4, 12))

    def members(each, loudness):
        k = np.repeat(np.arange(4), each)
        return loudness * marks[k] + rng.normal(size=(len(k), 12)), k.astype(str)

    loud, y = members(15, 1.0)
    quiet, truth = members(150, 0.35)
    parent = np.repeat(np.arange(len(y)), 5)
    copies = 0.35 * loud[parent] + rng.normal(0, 0.94, (len(parent), 12))
    plain = FamilySorter(n_trees=60).fit(loud, y)
    helped = FamilySorter(n_trees=60).fit(
        np.r_[loud, copies],
        np.r_[y, y[parent]],
        parent=np.r_[np.full(len(y), -1), parent],
    )
    assert helped.score(quiet, truth) > plain.score(quiet, truth) + 0.02


@pytest.mark.parametrize(
    ("changes", "text"),
    [
        ({"alpha": 0.0}, "alpha=0.0"),
        ({"reject": 0.9}, "reject=0.9"),
        ({"n_trees": 0}, "n_trees=0"),
        ({"calibration": "magic"}, "temperature"),
    ],
)
def test_settings_out_of_bounds_are_refused(changes, text):
    x, y, _ = family_table(1, each=10)
    with pytest.raises(TrainingError, match=text):
        FamilySorter(**changes).fit(x, y)


def test_labels_that_teach_nothing_are_refused():
    x, y, groups = family_table(1, each=10)
    with pytest.raises(TrainingError, match="reserved"):
        FamilySorter().fit(x, np.where(y == "comb", "unknown", y))
    with pytest.raises(TrainingError, match="1 class"):
        FamilySorter().fit(x, np.full(len(x), "comb"))
    with pytest.raises(TrainingError, match="1 block of time"):
        FamilySorter().fit(x, y, groups=np.zeros(len(x)))
    with pytest.raises(TrainingError, match="59 groups"):
        FamilySorter().fit(x, y, groups=groups[:59])
    for parent, text in ((np.full(60, 60), "no row"), (np.arange(60) - 1, "itself")):
        with pytest.raises(TrainingError, match=text):
            FamilySorter().fit(x, y, parent=parent)


@pytest.mark.reference
@pytest.mark.parametrize("load", [load_wine, load_breast_cancer])
def test_real_tables_sort_as_well_as_a_plain_forest(load):
    """Outside data with groups: the forest must lose nothing by its wrapping."""
    x, y = load(return_X_y=True)
    names = np.array(["a", "b", "c"])[y]
    groups = np.random.default_rng(1).integers(0, 25, len(y))
    held = FamilySorter(n_trees=100).fit(x, names, groups=groups).out_of_fold_
    ours = (held.probability.argmax(axis=1) == held.truth).mean()
    plain = np.empty(len(y), dtype=int)
    for f in np.unique(held.fold):
        inside = held.fold == f
        forest = RandomForestClassifier(
            100, class_weight="balanced", random_state=0
        ).fit(x[~inside], y[~inside])
        plain[inside] = forest.predict(x[inside])
    assert ours >= (plain == y).mean() - 0.02
    right = held.probability.argmax(axis=1) == held.truth
    assert calibration_error(held.probability.max(axis=1), right) < 0.05
