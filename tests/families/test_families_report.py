"""The report's tables against planted truths; unknowns grouped; drift named."""

import numpy as np
import pandas as pd
import pytest
from family_table import FAMILIES, family_table
from sklearn import metrics

from dq.counting import clopper_pearson
from dq.families import (
    FamilySorter,
    curves,
    drift,
    drift_text,
    group_unknowns,
    validation,
)
from dq.families.guard import CHIRP_LIKE


@pytest.fixture(scope="module")
def table():
    return family_table(11, each=60)


@pytest.fixture(scope="module")
def sorter(table):
    x, y, groups = table
    return FamilySorter(n_trees=60).fit(x, y, groups=groups)


@pytest.mark.reference
def test_scores_are_scikit_learns(sorter):
    said = validation.decisions(sorter)
    truth = sorter.out_of_fold_.truth
    labels = np.arange(len(sorter.classes_))
    expected = metrics.precision_recall_fscore_support(
        truth, said, labels=labels, zero_division=0
    )
    ours = validation.family_scores(sorter)
    for name, values in zip(("precision", "recall", "f1"), expected, strict=False):
        np.testing.assert_allclose(ours[name], values)
    counts = metrics.confusion_matrix(truth, said, labels=[*labels, -1])[:-1]
    np.testing.assert_array_equal(validation.confusion(sorter).to_numpy(), counts)


def test_intervals_are_exact_and_hold_the_value(sorter):
    for row in validation.family_scores(sorter).itertuples():
        low, high = clopper_pearson(row.right, row.examples)
        assert (row.recall_low, row.recall_high) == (low, high)
        for name in ("precision", "recall", "f1"):
            value = getattr(row, name)
            assert getattr(row, f"{name}_low") <= value <= getattr(row, f"{name}_high")


def test_the_headline_agrees_with_the_tables(sorter):
    head = validation.headline(sorter)
    assert head["examples"] == 360
    assert head["macro_f1"] == validation.family_scores(sorter)["f1"].mean()
    total = validation.set_scores(sorter).iloc[-1]
    assert (head["coverage"], total["family"]) == (total["coverage"], "all")
    assert total["covered"] == validation.set_scores(sorter)["covered"][:-1].sum()
    assert validation.reliability_table(sorter)["count"].sum() == 360


def test_guard_misses_count_noise_families_only(sorter):
    found = validation.guard_misses(sorter, CHIRP_LIKE)
    row = validation.confusion(sorter).loc[CHIRP_LIKE]
    assert found["missed"] == row.sum() - row[CHIRP_LIKE] - row["unknown"]
    assert found["examples"] == 60
    assert validation.guard_misses(sorter, "absent")["high"] == 1.0


def test_the_audit_finds_planted_wrong_labels():
    x, y, groups = family_table(21, each=200, families=FAMILIES)
    rng = np.random.default_rng(22)
    wrong = rng.choice(len(y), len(y) // 20, replace=False)
    spoilt = y.copy()
    for i in wrong:
        spoilt[i] = rng.choice([f for f in FAMILIES if f != y[i]])
    audit = validation.label_audit(
        FamilySorter(n_trees=60).fit(x, spoilt, groups=groups)
    )
    top = audit["row"].to_numpy()[: len(y) // 10]
    assert np.isin(wrong, top).mean() >= 0.8
    first = audit.iloc[0]
    assert first["label"] == spoilt[first["row"]] != first["suggested"]
    assert sorted(audit["row"]) == list(range(len(y)))


def test_importance_finds_the_planted_columns():
    rng = np.random.default_rng(31)
    y = rng.integers(0, 3, 400)
    x = rng.normal(size=(400, 8))
    x[:, 2] += 3.0 * (y == 1)
    x[:, 5] += 3.0 * (y == 2)
    # two copies of one column: each alone loses little, both together much
    x[:, 6] = x[:, 7] = rng.normal(size=400) + 3.0 * (y == 0)
    sorter = FamilySorter(n_trees=60).fit(x, y.astype(str), groups=np.arange(400) // 5)
    names = [f"f{i}" for i in range(8)]
    found = validation.importance(
        sorter,
        x,
        names=names,
        feature_groups={"copies": ["f6", "f7"], "idle": ["f0", "f1", "f3", "f4"]},
        rng=np.random.default_rng(1),
    ).set_index("name")["loss"]
    assert found[["f2", "f5"]].min() > 5 * found[["f0", "f1", "f3", "f4"]].max()
    assert found["copies"] > 1.5 * found[["f6", "f7"]].max()
    assert abs(found["idle"]) < 0.02


def test_more_labels_help_where_they_are_few():
    x, y, groups = family_table(41, each=60, spread=2.5, epochs=40)
    sorter = FamilySorter(n_trees=40).fit(x, y, groups=groups)
    options = {"rng": np.random.default_rng(1), "shares": (0.1, 1.0)}
    curve = curves.learning_curve(sorter, x.to_numpy(), **options)
    mean = curve[curve["family"] == "macro"].set_index("share")
    assert mean.loc[0.1, "f1"] < mean.loc[1.0, "f1"] - 0.05
    assert mean.loc[0.1, "examples"] < 0.2 * mean.loc[1.0, "examples"]
    assert set(curve["family"]) == {*FAMILIES, "macro"}


def test_families_left_out_are_declined(sorter, table):
    found = curves.new_families(
        sorter, table[0].to_numpy(), rng=np.random.default_rng(1)
    )
    assert found["family"].tolist() == sorted(FAMILIES)
    assert found["declined"].sum() / found["examples"].sum() > 0.8
    assert found["known_declined"].max() <= 0.03


def unknowns(seed=51):
    """Give 19 examples of one kind that nobody labelled, and 8 that stand alone."""
    kind, _, _ = family_table(seed, each=19, families=("glow",), epochs=19)
    rng = np.random.default_rng(seed)
    alone = rng.normal(0.0, 6.0, (8, kind.shape[1]))
    return np.concatenate([kind.to_numpy(), alone])


def test_unknowns_of_one_kind_are_proposed(sorter):
    found = group_unknowns(unknowns(), sorter, live_time_s=7200.0)
    assert found.table["count"].iloc[0] >= 17
    assert (found.group[19:] == 0).all()
    assert found.table["per_hour"].iloc[0] == found.table["count"].iloc[0] / 2
    assert found.text == f"27 unknowns, {found.table['count'].iloc[0]} of one kind"
    assert found.group[found.table["typical"].iloc[0]] == 1


def test_two_kinds_make_two_groups_and_order_does_not_matter(sorter):
    other, _, _ = family_table(52, each=12, families=("hum",), epochs=12)
    every = np.concatenate([unknowns(), other.to_numpy()])
    found = group_unknowns(every, sorter, live_time_s=3600.0)
    assert len(found.table) == 2
    order = np.random.default_rng(1).permutation(len(every))
    again = group_unknowns(every[order], sorter, live_time_s=3600.0)
    np.testing.assert_array_equal(found.group[order], again.group)


def test_few_unknowns_make_no_group(sorter):
    for count, text in ((0, "0 unknowns"), (1, "1 unknown"), (2, "2 unknowns")):
        found = group_unknowns(unknowns()[:count], sorter, live_time_s=60.0)
        assert (len(found.group), len(found.table), found.text) == (count, 0, text)


def test_a_night_like_the_training_set_has_not_moved(sorter):
    """Another mix of families is no drift."""
    night, y, _ = family_table(61, each=80)
    mixed = night[(y == "arch") | (y == "knock") | (np.arange(len(y)) % 4 == 0)]
    table = drift(mixed, sorter)
    assert not table["moved"].any()
    assert drift_text(table, declined=2, total=100, reject=0.02) == ""


def test_moved_features_are_named(sorter):
    night, _, _ = family_table(62, each=80)
    night["feature_07"] += 1.5 * sorter.space_.spread[7]
    table = drift(night, sorter)
    moved = table[table["moved"]]
    assert moved["feature"].tolist() == ["feature_07"]
    assert moved["shift"].iloc[0] == pytest.approx(1.5, abs=0.6)
    text = drift_text(table, declined=30, total=100, reject=0.02)
    assert "feature_07 (+" in text
    assert "30 of 100 transients are unknown" in text


@pytest.mark.reference
def test_the_drift_distance_is_scipys(rng):
    from scipy.stats import ks_2samp

    from dq.families.drift import _distance

    a, b = rng.normal(size=300), rng.normal(0.3, 1.2, size=200)
    distance, p = _distance(a, b, np.ones(200))
    expected = ks_2samp(a, b, method="asymp")
    assert distance == pytest.approx(expected.statistic)
    assert p == pytest.approx(expected.pvalue, rel=0.35)
    # weights of 2 are the same as repeated values
    doubled = _distance(a, np.repeat(b, 2), np.ones(400))[0]
    assert _distance(a, b, np.full(200, 2.0))[0] == pytest.approx(doubled)


def test_drift_without_known_transients_is_empty(sorter):
    far = pd.DataFrame(np.full((3, 24), 60.0), columns=sorter.feature_names_in_)
    assert len(drift(far, sorter)) == 0
    assert "3 of 3" in drift_text(drift(far, sorter), declined=3, total=3, reject=0.02)
