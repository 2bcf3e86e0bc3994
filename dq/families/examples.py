"""Examples of a training: checked, traced to their parents, judged out of fold."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from dq.errors import TrainingError
from dq.families.labels import check_family


@dataclass(frozen=True)
class OutOfFold:
    """What was said of each example by models that had not seen its block of time.

    Attributes
    ----------
    rows : ndarray of int, shape (n,)
        The examples' rows in the training table (replanted copies are left out).
    truth : ndarray of int, shape (n,)
        Column of the labelled family in ``classes_``.
    fold, group : ndarray, shape (n,)
    votes, probability : ndarray, shape (n, families)
    sets : ndarray of bool, shape (n, families)
    novelty : ndarray, shape (n,)
    contradicted : ndarray of bool, shape (n,)
        Labels that are most likely wrong; they set no bar.
    """

    rows: np.ndarray
    truth: np.ndarray
    fold: np.ndarray
    group: np.ndarray
    votes: np.ndarray
    probability: np.ndarray
    sets: np.ndarray
    novelty: np.ndarray
    contradicted: np.ndarray


def check_families(families: np.ndarray) -> None:
    """Refuse fewer than two families, and names that no label may use."""
    if len(families) < 2:
        raise TrainingError(
            f"the labels name {len(families)} class (family); at least 2 are needed"
        )
    if families.dtype.kind in "UO":
        for name in families:
            check_family(str(name))


def check_weight(weight, truth, families) -> None:
    """Refuse weights that leave a family without any."""
    total = np.bincount(truth, weights=weight, minlength=len(families))
    if np.any(weight < 0) or np.any(total <= 0):
        name = families[int(total.argmin())]
        raise TrainingError(
            f"family (class) {name!r} has no weight, or a weight is negative; leave "
            "such examples out"
        )


def roots_of(parent, count: int) -> np.ndarray:
    """Give for each row the example that it stands for: its parent or itself."""
    rows = np.arange(count)
    if parent is None:
        return rows
    parent = np.asarray(parent, dtype=np.int64)
    if len(parent) != count:
        raise TrainingError(f"{len(parent)} parents for {count} examples")
    if np.any(parent >= count) or np.any(parent < -1):
        raise TrainingError("a parent is no row of the table")
    if np.any(parent[parent[parent >= 0]] >= 0):
        raise TrainingError("a parent is itself a replanted copy; give its example")
    return np.where(parent >= 0, parent, rows)
