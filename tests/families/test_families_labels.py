"""Labels matched to transients, labellers settled, blocks of time kept whole."""

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from sklearn.model_selection import GroupKFold

from dq.errors import TrainingError
from dq.families.groups import group_folds, time_groups
from dq.families.labels import check_family, labeller_agreement, match_labels

TRANSIENTS = pd.DataFrame(
    {
        "gps_time": [100.0, 110.0, 120.0, 120.3],
        "gps_start": [99.9, 108.0, 119.9, 120.2],
        "gps_end": [100.1, 112.0, 120.1, 120.4],
    }
)


def labels(*rows):
    return pd.DataFrame(rows, columns=["gps_time", "family", "labeller"])


def test_a_label_goes_to_the_nearest_transient():
    found = match_labels(
        labels((120.26, "knock", "ada"), (100.02, "ring", "ada")), TRANSIENTS
    )
    assert found.matched["transient"].tolist() == [0, 3]
    assert found.matched["family"].tolist() == ["ring", "knock"]
    assert found.unmatched.empty


def test_a_label_inside_a_long_transient_is_no_distance_away():
    found = match_labels(labels((111.9, "arch", "ada")), TRANSIENTS)
    assert found.matched["gps_time"].tolist() == [110.0]


def test_labels_that_match_nothing_are_listed_with_the_reason():
    found = match_labels(labels((105.0, "ring", "ada")), TRANSIENTS)
    assert found.matched.empty
    assert found.unmatched["reason"].tolist() == [
        "nearest transient is 3.000 s away, more than 0.5 s"
    ]
    nothing = match_labels(labels((105.0, "ring", "ada")), TRANSIENTS[:0])
    assert nothing.unmatched["reason"].tolist() == ["no transient at all"]


def test_the_majority_holds_and_a_tie_goes_to_the_first():
    three = labels(
        (100.0, "ring", "ada"), (100.0, "knock", "bo"), (100.0, "knock", "cy")
    )
    found = match_labels(three, TRANSIENTS).matched.iloc[0]
    assert (found["family"], found["labellers"]) == ("knock", 3)
    assert found["agreed"] == pytest.approx(2 / 3)
    assert match_labels(three[:2], TRANSIENTS).matched["family"].tolist() == ["ring"]


def test_one_labeller_counts_once():
    twice = labels(
        (100.05, "ring", "ada"), (100.0, "knock", "ada"), (99.8, "arch", "ada")
    )
    found = match_labels(twice, TRANSIENTS)
    assert found.matched["labellers"].tolist() == [1]
    assert len(found.unmatched) == 2
    assert found.unmatched["reason"].str.contains("ada labelled this").all()
    assert len(found.matched) + len(found.unmatched) == 3


def test_agreement_counts_common_transients_only():
    votes = match_labels(
        labels(
            (100.0, "ring", "ada"),
            (110.0, "arch", "ada"),
            (120.0, "knock", "ada"),
            (100.0, "ring", "bo"),
            (110.0, "knock", "bo"),
            (120.3, "ring", "cy"),
        ),
        TRANSIENTS,
    ).votes
    table = labeller_agreement(votes)
    assert table[["first", "second", "both", "agreed"]].to_numpy().tolist() == [
        ["ada", "bo", 2, 1]
    ]
    # ada: ring, arch; bo: ring, knock: observed 1/2, expected 1/4
    assert table["kappa"].iloc[0] == pytest.approx((0.5 - 0.25) / 0.75)


@pytest.mark.parametrize("name", ["unknown", "unsorted", "", " ring", "a;b", "a\nb"])
def test_names_that_no_label_may_use(name):
    with pytest.raises(TrainingError, match=r"reserved|printable"):
        check_family(name)
    with pytest.raises(TrainingError):
        match_labels(labels((100.0, name, "ada")), TRANSIENTS)


def test_time_groups_start_at_multiples():
    assert time_groups([127.9, 128.0, -1.0]).tolist() == [1, 2, -1]
    with pytest.raises(ValueError, match="positive"):
        time_groups([1.0], 0.0)
    with pytest.raises(ValueError, match="finite"):
        time_groups([np.nan])


@given(st.integers(0, 2**32), st.integers(2, 6))
def test_no_group_is_split_and_every_fold_is_used(seed, folds):
    rng = np.random.default_rng(seed)
    groups = rng.integers(0, 15, 120)
    y = rng.integers(0, 4, 120)
    dealt = group_folds(y, groups, folds=folds, rng=np.random.default_rng(1))
    assert set(dealt) == set(range(folds))
    for group in np.unique(groups):
        assert len(set(dealt[groups == group])) == 1


def test_families_are_shared_more_evenly_than_by_groups_alone():
    """Outside check: scikit-learn's GroupKFold looks at sizes only."""
    rng = np.random.default_rng(3)
    groups = rng.integers(0, 40, 600)
    # a rare family lives in a few groups
    y = np.where(np.isin(groups, [1, 5, 9, 13, 17, 21, 25, 29, 33, 37]), 1, 0)
    ours = group_folds(y, groups, folds=5, rng=rng)
    theirs = np.empty(600, dtype=int)
    for f, (_, test) in enumerate(GroupKFold(5).split(y, y, groups)):
        theirs[test] = f

    def unevenness(fold):
        return np.std([(y[fold == f] == 1).sum() for f in range(5)])

    assert unevenness(ours) < unevenness(theirs)
