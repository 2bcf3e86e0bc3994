"""Trials that grow forests anew: the learning curve, and families left out.

Both leave whole blocks of time out, like everything in the report.
"""

from __future__ import annotations

from copy import copy

import numpy as np
import pandas as pd

from dq.counting import clopper_pearson
from dq.families.groups import group_folds
from dq.families.novelty import fit_tails, novelty_bar, of_chosen
from dq.families.sorter import FamilySorter
from dq.families.trust import borne_out

#: Shares of the training blocks at which the learning curve is measured.
SHARES = (0.125, 0.25, 0.5, 0.75, 1.0)

#: Folds of these trials: fewer than in training, since each grows many forests.
_FOLDS = 3


def _smaller(sorter: FamilySorter) -> FamilySorter:
    """Give the sorter with half the trees, to grow many forests in acceptable time."""
    out = copy(sorter)
    out.n_trees = max(sorter.n_trees // 2, 1)
    return out


def _folds(truth, group, rng) -> np.ndarray:
    blocks = len(np.unique(group))
    return group_folds(truth, group, folds=min(_FOLDS, blocks), rng=rng)


def learning_curve(
    sorter: FamilySorter, X: np.ndarray, *, rng: np.random.Generator, shares=SHARES
) -> pd.DataFrame:
    """Measure F1 against the number of labels, by blocks of time.

    Parameters
    ----------
    sorter : FamilySorter
        Fitted; its settings and split are used.
    X : ndarray, shape (n, features)
        The training table.
    rng : numpy.random.Generator
    shares : sequence of float

    Returns
    -------
    pandas.DataFrame
        ``share, examples`` (mean number trained on), ``family`` (or ``macro``),
        ``labels`` (mean number of that family trained on), ``f1``.
    """
    sorter = _smaller(sorter)
    held = sorter.out_of_fold_
    X = np.asarray(X, float)[held.rows]
    fold = _folds(held.truth, held.group, rng)
    blocks = np.unique(held.group)
    order = rng.permutation(len(blocks))
    rank = np.empty(len(blocks))
    rank[order] = (np.arange(len(blocks)) + 1) / len(blocks)
    ranked = rank[np.searchsorted(blocks, held.group)]
    rows = []
    for share in shares:
        said = np.full(len(X), -1)
        used = np.zeros(len(sorter.classes_))
        for f in np.unique(fold):
            # the same order of blocks at every share: a larger set holds the smaller
            train = (fold != f) & (ranked <= share)
            used += np.bincount(held.truth[train], minlength=len(used))
            if len(np.unique(held.truth[train])) < 2:
                continue
            weight = np.ones(int(train.sum()))
            forest, _ = sorter.grow(X[train], held.truth[train], weight)
            said[fold == f] = forest.vote(X[fold == f]).argmax(axis=1)
        folds = len(np.unique(fold))
        scores = [_f1(held.truth == k, said == k) for k in range(len(used))]
        whole = {"share": share, "examples": used.sum() / folds}
        rows.append(
            {**whole, "family": "macro", "labels": np.nan, "f1": np.mean(scores)}
        )
        for k, family in enumerate(sorter.classes_):
            labels = used[k] / folds
            rows.append(
                {**whole, "family": str(family), "labels": labels, "f1": scores[k]}
            )
    return pd.DataFrame(rows)


def _f1(own: np.ndarray, called: np.ndarray) -> float:
    total = own.sum() + called.sum()
    return float(2 * (own & called).sum() / total) if total else 0.0


def new_families(
    sorter: FamilySorter, X: np.ndarray, *, rng: np.random.Generator
) -> pd.DataFrame:
    """Leave each family out of training and count how often it is then declined.

    Parameters
    ----------
    sorter, X, rng
        As for :func:`learning_curve`.

    Returns
    -------
    pandas.DataFrame
        ``family, examples, declined, share, low, high``: how many of the family's
        examples a sorter that never saw it calls unknown, and ``known_declined``: the
        share of all others that it turns away, out of fold.
    """
    sorter = _smaller(sorter)
    held = sorter.out_of_fold_
    X = np.asarray(X, float)[held.rows]
    fold = _folds(held.truth, held.group, rng)
    rows = []
    for k, family in enumerate(sorter.classes_):
        known = held.truth != k
        if len(np.unique(held.truth[known])) < 2:
            continue
        usual, strange = _novelties(sorter, X, held.truth, fold, known)
        bar = novelty_bar(usual, sorter.reject)
        count, declined = len(strange), int((strange > bar).sum())
        low, high = clopper_pearson(declined, count)
        rows.append(
            {
                "family": str(family),
                "examples": count,
                "declined": declined,
                "share": declined / count,
                "low": low,
                "high": high,
                "known_declined": float((usual > bar).mean()),
            }
        )
    return pd.DataFrame(rows)


def _novelties(sorter, X, truth, fold, known) -> tuple[np.ndarray, np.ndarray]:
    """Give raw novelty of the known rows, out of fold, and of the others."""
    x, y, fold, new = X[known], truth[known], fold[known], X[~known]
    votes = np.zeros((len(x), len(sorter.classes_)))
    for f in np.unique(fold):
        train = fold != f
        forest, _ = sorter.grow(x[train], y[train], np.ones(int(train.sum())))
        votes[~train] = forest.vote(x[~train])
    signs = sorter.signs_out_of_fold(x, y, fold, votes)
    tails = fit_tails(votes, signs)
    usual = of_chosen(tails.combine(votes, signs), votes)
    good = borne_out(votes, y)
    forest, _ = sorter.grow(x, y, np.ones(len(x)))
    asked = forest.vote(new)
    strange = tails.combine(asked, sorter.learn_signs(x[good], y[good]).measure(new))
    return usual, of_chosen(strange, asked)
