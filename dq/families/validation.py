"""The tables of an honest report: everything measured on time not trained on."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import pandas as pd

from dq.counting import clopper_pearson
from dq.families.scores import (
    binomial_two_sided,
    brier,
    calibration_error,
    log_loss,
    one_hot,
    reliability,
)
from dq.families.sorter import FamilySorter

#: What a decision is called in the confusion matrix when the sorter declines.
DECLINED = "unknown"


def decisions(sorter: FamilySorter) -> np.ndarray:
    """Give each example's decision: a column of ``classes_``, or -1 for unknown."""
    held = sorter.out_of_fold_
    return np.where(held.novelty > 1.0, -1, held.probability.argmax(axis=1))


def family_scores(sorter: FamilySorter) -> pd.DataFrame:
    """Measure precision, recall and F1 of each family, out of fold.

    Returns
    -------
    pandas.DataFrame
        ``family, examples, blocks, sorted, right, precision, precision_low,
        precision_high, recall, recall_low, recall_high, f1, f1_low, f1_high``. A
        declined example counts as not recalled. Intervals are exact, 95 %; F1 = 2 TP /
        (2 TP + wrong) is a rising function of the share TP / (TP + wrong), whose exact
        interval is carried over (wrong: missed and false ones together, taken as given
        in number).
    """
    held, said = sorter.out_of_fold_, decisions(sorter)
    rows = []
    for k, family in enumerate(sorter.classes_):
        own, called = held.truth == k, said == k
        right = int((own & called).sum())
        union = int((own | called).sum())
        share = clopper_pearson(right, union)
        row = {
            "family": str(family),
            "examples": int(own.sum()),
            "blocks": len(np.unique(held.group[own])),
            "sorted": int(called.sum()),
            "right": right,
        }
        for name, of in (("precision", int(called.sum())), ("recall", int(own.sum()))):
            low, high = clopper_pearson(right, of)
            row[name] = right / of if of else np.nan
            row[f"{name}_low"], row[f"{name}_high"] = low, high
        total = row["examples"] + row["sorted"]
        row["f1"] = 2 * right / total if total else np.nan
        row["f1_low"], row["f1_high"] = (2 * s / (1 + s) for s in share)
        rows.append(row)
    return pd.DataFrame(rows)


def confusion(sorter: FamilySorter) -> pd.DataFrame:
    """Count labelled families (rows) against decisions (columns, unknown last)."""
    held, said = sorter.out_of_fold_, decisions(sorter)
    names = [str(f) for f in sorter.classes_]
    counts = np.zeros((len(names), len(names) + 1), dtype=np.int64)
    np.add.at(counts, (held.truth, said), 1)
    table = pd.DataFrame(counts, index=names, columns=[*names, DECLINED])
    table.index.name = "family"
    return table


def reliability_table(sorter: FamilySorter) -> pd.DataFrame:
    """Compare the stated probability of the best family with how often it was right."""
    confidence, right = _confidence(sorter)
    return reliability(confidence, right)


def _confidence(sorter: FamilySorter) -> tuple[np.ndarray, np.ndarray]:
    held = sorter.out_of_fold_
    best = held.probability.argmax(axis=1)
    return held.probability.max(axis=1), best == held.truth


def set_scores(sorter: FamilySorter) -> pd.DataFrame:
    """Measure coverage and size of the sets, for each family and for all.

    Returns
    -------
    pandas.DataFrame
        ``family, examples, covered, coverage, coverage_low, coverage_high, p_value
        (exact two-sided binomial test of 1 - alpha), mean_size, empty, contradicted``
        (labels that are most likely wrong: they set no bar, count as they stand, and
        lower the coverage by their share); the last row is ``all``.
    """
    held = sorter.out_of_fold_
    hit = held.sets[np.arange(len(held.truth)), held.truth]
    size = held.sets.sum(axis=1)
    rows = []
    members = [(str(f), held.truth == k) for k, f in enumerate(sorter.classes_)]
    for family, own in [*members, ("all", np.ones(len(hit), dtype=bool))]:
        count, covered = int(own.sum()), int(hit[own].sum())
        low, high = clopper_pearson(covered, count)
        rows.append(
            {
                "family": family,
                "examples": count,
                "covered": covered,
                "coverage": covered / count,
                "coverage_low": low,
                "coverage_high": high,
                "p_value": binomial_two_sided(covered, count, 1.0 - sorter.alpha),
                "mean_size": float(size[own].mean()),
                "empty": int((size[own] == 0).sum()),
                "contradicted": int(held.contradicted[own].sum()),
            }
        )
    return pd.DataFrame(rows)


def headline(sorter: FamilySorter) -> dict[str, float]:
    """Give the report's single figures, out of fold.

    Returns
    -------
    dict
        ``examples, families, macro_f1, accuracy, brier, log_loss,
        calibration_error, coverage, mean_set_size, contradicted`` (labels that are
        most likely wrong), ``declined`` (share of known examples called unknown).
    """
    held, said = sorter.out_of_fold_, decisions(sorter)
    truth = one_hot(held.truth, np.arange(len(sorter.classes_)))
    confidence, right = _confidence(sorter)
    total = set_scores(sorter).iloc[-1]
    return {
        "examples": len(held.truth),
        "families": len(sorter.classes_),
        "macro_f1": float(family_scores(sorter)["f1"].mean()),
        "accuracy": float((said == held.truth).mean()),
        "brier": brier(held.probability, truth),
        "log_loss": log_loss(held.probability, truth),
        "calibration_error": calibration_error(confidence, right),
        "coverage": float(total["coverage"]),
        "mean_set_size": float(total["mean_size"]),
        "contradicted": int(total["contradicted"]),
        "declined": float((said < 0).mean()),
    }


def guard_misses(sorter: FamilySorter, guarded: str) -> dict[str, float]:
    """Measure how often the guarded family was put into any noise family.

    Returns
    -------
    dict
        ``examples, missed, miss_rate, low, high`` (exact 95 % interval). ``unknown`` is
        no miss: it is never vetoed.
    """
    names = [str(f) for f in sorter.classes_]
    if guarded not in names:
        return {
            "examples": 0,
            "missed": 0,
            "miss_rate": np.nan,
            "low": 0.0,
            "high": 1.0,
        }
    column = names.index(guarded)
    said = decisions(sorter)[sorter.out_of_fold_.truth == column]
    missed = int(((said >= 0) & (said != column)).sum())
    low, high = clopper_pearson(missed, len(said))
    return {
        "examples": len(said),
        "missed": missed,
        "miss_rate": missed / len(said),
        "low": low,
        "high": high,
    }


def label_audit(sorter: FamilySorter) -> pd.DataFrame:
    """Rank examples by how strongly models without them contradict the label.

    Returns
    -------
    pandas.DataFrame
        ``row`` (of the training table), ``label, suggested, label_probability,
        suggested_probability, margin``; the most suspicious first. The margin is the
        label's probability less the best other family's (Northcutt, Jiang & Chuang
        2021, J. Artif. Intell. Res. 70 1373, normalised margin; from memory).
    """
    held = sorter.out_of_fold_
    # votes are finer than calibrated probabilities, which tie near 0 and 1
    shares = held.votes
    index = np.arange(len(held.truth))
    own = shares[index, held.truth]
    others = shares.copy()
    others[index, held.truth] = -1.0
    rival = others.argmax(axis=1)
    margin = own - others[index, rival]
    order = np.lexsort((held.rows, own, margin))
    table = pd.DataFrame(
        {
            "row": held.rows,
            "label": sorter.classes_[held.truth].astype(str),
            "suggested": sorter.classes_[rival].astype(str),
            "label_probability": held.probability[index, held.truth],
            "suggested_probability": held.probability[index, rival],
            "margin": margin,
        }
    )
    return table.iloc[order].reset_index(drop=True)


def importance(
    sorter: FamilySorter,
    X: np.ndarray,
    *,
    names: Sequence[str],
    feature_groups: Mapping[str, Sequence[str]] | None = None,
    rng: np.random.Generator,
    repeats: int = 3,
) -> pd.DataFrame:
    """Measure what is lost when a feature is shuffled (Breiman 2001).

    Parameters
    ----------
    sorter : FamilySorter
        Its settings are used; one forest is grown without one fold of time blocks, and
        asked about that fold.
    X : ndarray, shape (n, features)
    names : sequence of str
    feature_groups : mapping of str to sequence of str, optional
        Features that are also shuffled together, which shows what correlated ones
        know jointly.
    rng : numpy.random.Generator
    repeats : int

    Returns
    -------
    pandas.DataFrame
        ``kind`` (feature or group), ``name, loss, spread``: mean and standard deviation
        of the share of votes that the labelled families lose; largest first. Votes
        show what a feature knows even where others keep the decision right.
    """
    held = sorter.out_of_fold_
    X = np.asarray(X, float)[held.rows]
    train = held.fold != 0
    weight = np.ones(int(train.sum()))
    forest, _ = sorter.grow(X[train], held.truth[train], weight)
    x, truth = X[~train], held.truth[~train]
    index = np.arange(len(x))
    base = forest.vote(x)[index, truth].mean()
    place = {n: i for i, n in enumerate(names)}
    units = [("feature", n, [i]) for n, i in place.items()]
    for group, members in (feature_groups or {}).items():
        units.append(("group", group, [place[m] for m in members if m in place]))
    rows = []
    for kind, name, columns in units:
        losses = []
        for _ in range(repeats):
            shuffled = x.copy()
            shuffled[:, columns] = x[rng.permutation(len(x))][:, columns]
            losses.append(base - forest.vote(shuffled)[index, truth].mean())
        rows.append(
            {
                "kind": kind,
                "name": name,
                "loss": float(np.mean(losses)),
                "spread": float(np.std(losses)),
            }
        )
    table = pd.DataFrame(rows, columns=["kind", "name", "loss", "spread"])
    return table.sort_values("loss", ascending=False, kind="stable").reset_index(
        drop=True
    )
