"""Whether the noise moved away from what the sorter was trained on."""

from __future__ import annotations

import numpy as np
import pandas as pd

from dq.counting import binomial_chance
from dq.families.sorter import FamilySorter

#: False-discovery rate among the features (common practice).
LEVEL = 0.01

#: Smaller differences of the distributions are not worth a word, however significant
#: (own choice; 0 equal, 1 disjoint).
SMALLEST_EFFECT = 0.15


def drift(features: pd.DataFrame, sorter: FamilySorter) -> pd.DataFrame:
    """Compare a night's features with the training set, family mix taken out.

    Parameters
    ----------
    features : pandas.DataFrame
        The night's feature table, columns as trained.
    sorter : FamilySorter

    Returns
    -------
    pandas.DataFrame
        One row per feature, the most moved first: ``feature, distance`` (largest
        difference of the distributions, 0..1), ``shift`` (of the median, in training
        spreads), ``p_value, q_value, moved``. A night without transients that the
        sorter knows gives an empty table.

    Notes
    -----
    Kolmogorov-Smirnov distance between transients that the sorter knows and the
    training examples weighted to the same mix of families; its chance from the
    asymptotic law with the effective number of weighted examples (from memory:
    Monahan 2011, Numerical Methods of Statistics). Transients of one epoch are alike
    and not independent, so ``moved`` also asks for an effect of 0.15.
    """
    from scipy.stats import false_discovery_control

    columns = ["feature", "distance", "shift", "p_value", "q_value", "moved"]
    X = features.to_numpy(float)
    said = sorter.decide(features)["family"].to_numpy(object)
    names = sorter.classes_.astype(object)
    night = np.array([(said == f).sum() for f in names], dtype=float)
    trained = np.bincount(sorter.known_family_, minlength=len(names))
    if not night.sum():
        return pd.DataFrame(columns=columns)
    weight = (night / np.maximum(trained, 1))[sorter.known_family_]
    known = np.isin(said, names)
    rows = []
    for j, name in enumerate(features.columns):
        distance, p = _distance(X[known, j], sorter.known_[:, j], weight)
        spread = sorter.space_.spread[j]
        shift = _median(X[known, j]) - _median(sorter.known_[:, j], weight)
        rows.append((str(name), distance, shift / spread, p))
    table = pd.DataFrame(rows, columns=columns[:4])
    table["q_value"] = false_discovery_control(table["p_value"].to_numpy(float))
    table["moved"] = (table["q_value"] <= LEVEL) & (
        table["distance"] >= SMALLEST_EFFECT
    )
    order = np.lexsort((-table["distance"].to_numpy(), ~table["moved"].to_numpy()))
    return table.iloc[order].reset_index(drop=True)


def drift_text(table: pd.DataFrame, *, declined: int, total: int, reject: float) -> str:
    """Say what moved, or nothing.

    Parameters
    ----------
    table : pandas.DataFrame
        From :func:`drift`.
    declined, total : int
        Transients called unknown, and all.
    reject : float
        Share of known examples that the sorter turns away.

    Returns
    -------
    str
        Empty where nothing moved.
    """
    parts = []
    moved = table[table["moved"].astype(bool)] if len(table) else table
    if len(moved):
        shown = [
            f"{r.feature} ({r.shift:+.1f} spreads)" for r in moved.head(5).itertuples()
        ]
        more = f" and {len(moved) - 5} more" if len(moved) > 5 else ""
        parts.append(
            f"features moved away from the training set: {', '.join(shown)}{more}"
        )
    # 5 % is common practice for a warning; new families are the ordinary cause
    if total and binomial_chance(declined, total, 2.0 * reject) < 0.05:
        parts.append(
            f"{declined} of {total} transients are unknown, more than twice the "
            f"{100 * reject:g} % expected of known ones"
        )
    return "; ".join(parts)


def _finite(values, weight):
    ok = np.isfinite(values)
    return values[ok], weight[ok]


def _median(values: np.ndarray, weight: np.ndarray | None = None) -> float:
    weight = np.ones(len(values)) if weight is None else weight
    values, weight = _finite(values, weight)
    if not weight.sum():
        return float("nan")
    order = np.argsort(values, kind="stable")
    total = np.cumsum(weight[order])
    return float(values[order][np.searchsorted(total, 0.5 * total[-1])])


def _distance(a: np.ndarray, b: np.ndarray, weight: np.ndarray) -> tuple[float, float]:
    """Give the Kolmogorov-Smirnov distance and its chance; b is weighted."""
    from scipy.special import kolmogorov

    a = np.sort(a[np.isfinite(a)])
    b, weight = _finite(b, weight)
    if not len(a) or not weight.sum():
        return 0.0, 1.0
    order = np.argsort(b, kind="stable")
    b, weight = b[order], weight[order]
    every = np.unique(np.concatenate([a, b]))
    total = np.concatenate([[0.0], np.cumsum(weight)]) / weight.sum()
    gap = np.abs(
        np.searchsorted(a, every, side="right") / len(a)
        - total[np.searchsorted(b, every, side="right")]
    )
    size = weight.sum() ** 2 / (weight**2).sum()
    root = np.sqrt(len(a) * size / (len(a) + size))
    # Stephens 1970, J. R. Stat. Soc. B 32 115: better in small samples
    return float(gap.max()), float(kolmogorov((root + 0.12 + 0.11 / root) * gap.max()))
