"""All tables of the training report together."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, fields

import numpy as np
import pandas as pd

from dq.families import curves, validation
from dq.families.guard import CHIRP_LIKE
from dq.families.labels import Matched, labeller_agreement
from dq.families.sorter import FamilySorter

#: Seed of the report's own draws (shuffles, order of blocks).
_SEED = 20250101


@dataclass(frozen=True)
class TrainingReport:
    """What ``dq train`` says of a sorter, all of it out of fold.

    Attributes
    ----------
    figures : dict of str to float
        See :func:`dq.families.validation.headline`; and ``guard``: see
        ``guard_misses``.
    guard : dict of str to float
    families, confusion, reliability, sets, learning, new, importance, agreement, audit,
    unmatched : pandas.DataFrame
    """

    figures: dict
    guard: dict
    families: pd.DataFrame
    confusion: pd.DataFrame
    reliability: pd.DataFrame
    sets: pd.DataFrame
    learning: pd.DataFrame
    new: pd.DataFrame
    importance: pd.DataFrame
    agreement: pd.DataFrame
    audit: pd.DataFrame
    unmatched: pd.DataFrame

    def tables(self) -> dict[str, pd.DataFrame]:
        """Give the tables by name, in the order of the page."""
        kept = {f.name: getattr(self, f.name) for f in fields(self)}
        return {n: t for n, t in kept.items() if isinstance(t, pd.DataFrame)}


def make_report(
    sorter: FamilySorter,
    X: pd.DataFrame,
    *,
    times_s: np.ndarray,
    matched: Matched,
    feature_groups: Mapping[str, Sequence[str]] | None = None,
) -> TrainingReport:
    """Measure a freshly trained sorter.

    Parameters
    ----------
    sorter : FamilySorter
    X : pandas.DataFrame
        The table that it was trained on.
    times_s : ndarray, shape (n,)
        GPS time of each row, for the audit.
    matched : Matched
    feature_groups : mapping, optional
        Names of features that belong together.

    Returns
    -------
    TrainingReport
    """
    values = X.to_numpy(float)
    audit = validation.label_audit(sorter)
    audit.insert(0, "gps_time", np.asarray(times_s, float)[audit["row"].to_numpy()])
    return TrainingReport(
        figures=validation.headline(sorter),
        guard=validation.guard_misses(sorter, CHIRP_LIKE),
        families=validation.family_scores(sorter),
        confusion=validation.confusion(sorter),
        reliability=validation.reliability_table(sorter),
        sets=validation.set_scores(sorter),
        learning=curves.learning_curve(
            sorter, values, rng=np.random.default_rng(_SEED)
        ),
        new=curves.new_families(sorter, values, rng=np.random.default_rng(_SEED)),
        importance=validation.importance(
            sorter,
            values,
            names=[str(c) for c in X.columns],
            feature_groups=feature_groups,
            rng=np.random.default_rng(_SEED),
        ),
        agreement=labeller_agreement(matched.votes),
        audit=audit,
        unmatched=matched.unmatched,
    )
