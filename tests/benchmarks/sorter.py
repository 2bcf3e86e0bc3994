"""How good the family sorter is, on any training set.

    python tests/benchmarks/sorter.py FEATURES LABELS [TEST_FEATURES TEST_LABELS]

The files are those of a training set (``dq train --features``). With a second set, of
other seeds, waveform parameters and noise, everything that is marked "test" is measured
on it; without one, on blocks of time left out of the first. Labels of the second set
count as the truth. Times are CPU seconds of one thread.
"""

from __future__ import annotations

import sys
import time
from pathlib import Path

import numpy as np
import pandas as pd
from scipy.stats import binomtest

from dq.counting import clopper_pearson
from dq.families import CHIRP_LIKE, FamilySorter
from dq.families.scores import calibration_error
from dq.families.validation import label_audit
from dq.night.training_set import Examples, gather, read_features
from dq.store import read_labels

SEED = 7


def load(features: str, labels: str) -> tuple[Examples, np.ndarray]:
    hand = read_labels(Path(labels))
    table = read_features(Path(features))
    strain = hand["channel"].mode().iloc[0]
    examples = gather(hand, table, strain)
    snr = pd.Series(np.nan, index=table["gps_time"])
    if "snr" in table:
        snr = table.drop_duplicates("gps_time").set_index("gps_time")["snr"]
    return examples, snr.reindex(examples.times_s).to_numpy(float)


def part(e: Examples, rows: np.ndarray) -> Examples:
    """Give some rows, with the copies whose parents are among them."""
    place = np.full(len(e.family), -1)
    place[rows] = np.arange(len(rows))
    parent = np.where(e.parent[rows] >= 0, place[e.parent[rows]], -1)
    if np.any((parent < 0) & (e.parent[rows] >= 0)):
        raise ValueError("a copy is taken without its parent")
    return Examples(
        e.features.iloc[rows].reset_index(drop=True),
        e.family[rows],
        e.times_s[rows],
        e.groups[rows],
        parent,
        e.matched,
    )


def with_copies(e: Examples, chosen: np.ndarray) -> np.ndarray:
    """Give the chosen examples' rows and those of their copies."""
    taken = np.zeros(len(e.family), bool)
    taken[chosen] = True
    return np.flatnonzero(taken | (taken[e.parent] & (e.parent >= 0)))


def fit(e: Examples) -> FamilySorter:
    return FamilySorter().fit(e.features, e.family, groups=e.groups, parent=e.parent)


#: A family with fewer members in a range of SNR says nothing there: one member more or
#: less moves its F1 by a fifth or more.
FEWEST = 5


def macro_f1(truth, said) -> float:
    """Give the mean F1 of the families that have members enough."""
    scores = []
    for family in np.unique(truth):
        own, called = truth == family, said == family
        if own.sum() < FEWEST:
            continue
        scores.append(2 * (own & called).sum() / (own.sum() + called.sum()))
    return float(np.mean(scores))


def halves(e: Examples):
    """Split by blocks of time: rows to train on, rows of the test (no copies)."""
    side = np.random.default_rng(SEED).permutation(np.unique(e.groups))
    held = np.isin(e.groups, side[: len(side) // 3])
    return np.flatnonzero(~held), np.flatnonzero(held & (e.parent < 0))


def line(name: str, value: str, bar: str) -> None:
    print(f"{name:<48} {value:<34} {bar}")


def quality(sorter: FamilySorter, test: Examples, snr: np.ndarray) -> None:
    said = sorter.decide(test.features)
    family, truth = said["family"].to_numpy(object), test.family
    line("macro-F1, all", f"{macro_f1(truth, family):.4f}", "")
    for low, high, bar in ((8, np.inf, ">= 0.95"), (6.5, 8, ">= 0.90")):
        own = (snr >= low) & (snr < high)
        if own.sum() > 20:
            value = f"{macro_f1(truth[own], family[own]):.4f} ({own.sum()})"
            line(f"macro-F1, SNR {low:g} to {high:g}", value, bar)
    p = sorter.predict_proba(test.features)
    right = sorter.classes_[p.argmax(axis=1)] == truth
    line(
        "calibration error", f"{calibration_error(p.max(axis=1), right):.4f}", "<= 0.03"
    )
    line("known ones declined", f"{(family == 'unknown').mean():.2%}", "<= 3 %")
    known = np.isin(truth, sorter.classes_)
    column = np.searchsorted(sorter.classes_, truth[known])
    sets = sorter.predict_set(test.features)[known]
    hit = sets[np.arange(len(column)), column]
    line("coverage of 90 % sets", f"{hit.mean():.3f}", "0.88-0.93")
    chances = {
        f: binomtest(int(hit[column == k].sum()), int((column == k).sum()), 0.9).pvalue
        for k, f in enumerate(sorter.classes_)
        if (column == k).any()
    }
    worst = min(chances, key=chances.get)
    line("  least likely family", f"{worst}: p = {chances[worst]:.3g}", "consistent")
    line("  mean size", f"{sets.sum(axis=1).mean():.3f}", "<= 1.2")
    guarded = truth == CHIRP_LIKE
    if guarded.any():
        miss = int((guarded & ~np.isin(family, [CHIRP_LIKE, "unknown"])).sum())
        _, high = clopper_pearson(miss, int(guarded.sum()))
        value = f"{miss} of {guarded.sum()} (at most {high:.2%})"
        line("chirps put into a noise family", value, "<= 3 %")


def left_out(train: Examples, test: Examples) -> None:
    shares, none, turned = [], [], []
    for family in np.unique(train.family):
        sorter = fit(part(train, np.flatnonzero(train.family != family)))
        said = sorter.decide(test.features)
        new = test.family == family
        unknown = (said["family"] == "unknown").to_numpy()
        outside = unknown | (said["family_set"] == "").to_numpy()
        shares.append(unknown[new].mean())
        none.append(outside[new].mean())
        turned.append(unknown[~new].mean())
        value = f"{unknown[new].mean():.3f}, or no set {outside[new].mean():.3f}"
        line(f"  without {family}", value, f"known declined {turned[-1]:.3f}")
    value = f"{np.mean(shares):.3f}, or no set {np.mean(none):.3f}"
    line("left-out families, unknown", value, "the latter >= 0.90")
    line("  known ones declined meanwhile", f"{np.mean(turned):.3f}", "<= 0.03")


def few_labels(train: Examples, test: Examples, each: int = 40) -> None:
    rng = np.random.default_rng(SEED)
    own = np.flatnonzero(train.parent < 0)
    chosen = []
    for family in np.unique(train.family):
        members = own[train.family[own] == family]
        chosen.append(rng.permutation(members)[:each])
    sorter = fit(part(train, with_copies(train, np.concatenate(chosen))))
    said = sorter.decide(test.features)["family"].to_numpy(object)
    line(f"{each} labels per family", f"{macro_f1(test.family, said):.4f}", ">= 0.90")


def loud_labels(train: Examples, snr, test: Examples, test_snr, loud: float = 15.0):
    """Print what quieter copies are worth where only loud transients are labelled."""
    own = np.flatnonzero((train.parent < 0) & (snr >= loud))
    for name, rows in (
        ("without copies", own),
        ("with copies", with_copies(train, own)),
    ):
        said = fit(part(train, np.sort(rows))).predict(test.features)
        scores = []
        for low, high in ((8, np.inf), (6.5, 8)):
            own_range = (test_snr >= low) & (test_snr < high)
            score = macro_f1(test.family[own_range], said[own_range])
            scores.append(f"{score:.4f}")
        line(
            f"labels of SNR >= {loud:g} only, {name}",
            f"{scores[0]}; SNR 6.5 to 8 {scores[1]}",
            "",
        )


def audit(train: Examples) -> None:
    rng = np.random.default_rng(SEED)
    own = np.flatnonzero(train.parent < 0)
    e = part(train, own)
    wrong = rng.choice(len(own), len(own) // 20, replace=False)
    spoilt = e.family.copy()
    families = np.unique(spoilt)
    for i in wrong:
        spoilt[i] = rng.choice(families[families != e.family[i]])
    sorter = FamilySorter().fit(e.features, spoilt, groups=e.groups)
    top = label_audit(sorter)["row"].to_numpy()[: len(own) // 10]
    share = np.isin(wrong, top).mean()
    line("5 % wrong labels in the audit's top 10 %", f"{share:.3f}", ">= 0.80")


def speed(train: Examples) -> None:
    rng = np.random.default_rng(SEED)
    rows = rng.integers(0, len(train.family), 5000)
    x = train.features.to_numpy()[rows]
    x = x + 0.02 * np.nanstd(x, axis=0) * rng.normal(size=x.shape)
    begin = time.process_time()
    sorter = FamilySorter().fit(x, train.family[rows], groups=np.arange(5000) // 20)
    line("train 5000", f"{time.process_time() - begin:.1f} s", "<= 30 s")
    many = np.tile(x, (8, 1))
    sorter.decide(many[:100])
    begin = time.process_time()
    sorter.decide(many)
    rate = len(many) / (time.process_time() - begin)
    line("predict", f"{rate:.0f} per s", ">= 20000 per s")


def main(arguments: list[str]) -> int:
    if len(arguments) not in (2, 4):
        print(__doc__, file=sys.stderr)
        return 2
    train, snr = load(*arguments[:2])
    if len(arguments) == 4:
        test, test_snr = load(*arguments[2:])
        where = "test: the second set"
    else:
        rows, held = halves(train)
        test, test_snr = part(train, held), snr[held]
        train, snr = part(train, rows), snr[rows]
        where = "test: a third of the blocks of time"
    counts = pd.Series(train.family[train.parent < 0]).value_counts()
    print(f"{counts.sum()} examples, {counts.min()}-{counts.max()} a family; {where}")
    quality(fit(train), test, test_snr)
    few_labels(train, test)
    if (train.parent >= 0).any():
        loud_labels(train, snr, test, test_snr)
    audit(train)
    left_out(train, test)
    speed(train)
    return 0


if __name__ == "__main__":
    raise SystemExit(main(sys.argv[1:]))
