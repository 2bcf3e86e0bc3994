"""Unknown transients grouped: candidates for new families."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from scipy.spatial import cKDTree

from dq.families.sorter import FamilySorter
from dq.families.space import Space

#: Fewest members of a group, and neighbours that make an example part of one (own
#: choice: two alike may be chance).
SMALLEST = 3

#: Directions of the standardised features in which distances are taken: beyond a
#: dozen, distances of all pairs grow alike (own choice).
DIRECTIONS = 12

#: Share of known examples whose third neighbour of the same family lies within reach.
_WITHIN = 0.9


@dataclass(frozen=True)
class Proposals:
    """Groups of unknown transients.

    Attributes
    ----------
    group : ndarray of int, shape (n,)
        Number of each transient's group, 1 the largest; 0 for those that stand alone.
    table : pandas.DataFrame
        ``group, count, per_hour, typical`` (row of the most central member),
        ``nearest`` (the known family that most votes go to), largest first.
    text : str
        For instance ``27 unknowns, 19 of one kind``.
    """

    group: np.ndarray
    table: pd.DataFrame
    text: str


def group_unknowns(
    X: np.ndarray, sorter: FamilySorter, *, live_time_s: float
) -> Proposals:
    """Gather unknown transients that are as alike as a known family's members.

    Parameters
    ----------
    X : array_like, shape (n, features)
        Features of the unknown transients.
    sorter : FamilySorter
    live_time_s : float
        Time in which they were found, s.

    Returns
    -------
    Proposals

    Notes
    -----
    DBSCAN (Ester, Kriegel, Sander & Xu 1996, KDD, 226) in the leading directions of the
    known examples' standardised features. Its reach is the distance within which 90 %
    of the known examples have three neighbours of their own family.
    """
    X = np.asarray(X, float)
    if len(X) < SMALLEST:
        return Proposals(np.zeros(len(X), int), _table([], [], []), _text(len(X), []))
    turn, reach = _metric(sorter.space_, sorter.known_, sorter.known_family_)
    placed = sorter.space_.place(X) @ turn
    labels = _cluster(placed, reach)
    sizes = np.bincount(labels[labels >= 0], minlength=labels.max() + 1)
    order = sorted(
        range(len(sizes)),
        key=lambda g: (-sizes[g], int(np.flatnonzero(labels == g)[0])),
    )
    group = np.zeros(len(X), dtype=np.int64)
    votes = sorter.forest_.vote(X)
    rows, typical, nearest = [], [], []
    for number, g in enumerate(order, 1):
        members = np.flatnonzero(labels == g)
        group[members] = number
        centre = np.median(placed[members], axis=0)
        typical.append(
            int(members[((placed[members] - centre) ** 2).sum(axis=1).argmin()])
        )
        nearest.append(str(sorter.classes_[votes[members].mean(axis=0).argmax()]))
        rows.append(len(members))
    table = _table(rows, typical, nearest)
    table["per_hour"] = table["count"] * 3600.0 / live_time_s
    return Proposals(group, table, _text(len(X), rows))


def _metric(space: Space, known: np.ndarray, family: np.ndarray):
    """Give the leading directions and the reach of the known families."""
    z = space.place(known)
    _, _, turn = np.linalg.svd(z - z.mean(axis=0), full_matrices=False)
    turn = turn[:DIRECTIONS].T
    placed = z @ turn
    third = []
    for k in np.unique(family):
        members = placed[family == k]
        if len(members) > SMALLEST:
            third.append(cKDTree(members).query(members, SMALLEST + 1)[0][:, -1])
    if not third:
        return turn, 1.0
    # families weigh alike, however many examples each has
    return turn, float(np.median([np.quantile(t, _WITHIN) for t in third]))


def _cluster(placed: np.ndarray, reach: float) -> np.ndarray:
    from sklearn.cluster import DBSCAN

    return DBSCAN(eps=reach, min_samples=SMALLEST).fit_predict(placed)


def _table(counts, typical, nearest) -> pd.DataFrame:
    return pd.DataFrame(
        {
            "group": np.arange(1, len(counts) + 1),
            "count": np.array(counts, dtype=np.int64),
            "per_hour": np.zeros(len(counts)),
            "typical": np.array(typical, dtype=np.int64),
            "nearest": np.array(nearest, dtype=object),
        }
    )


def _text(total: int, counts: list[int]) -> str:
    """Say it in words.

    Examples
    --------
    >>> _text(27, [19]), _text(1, []), _text(12, [5, 4])
    ('27 unknowns, 19 of one kind', '1 unknown', '12 unknowns, 5 and 4 alike')
    """
    text = f"{total} unknown" + ("" if total == 1 else "s")
    if len(counts) == 1:
        return f"{text}, {counts[0]} of one kind"
    if counts:
        shown = [str(c) for c in counts[:3]]
        more = f" and {len(counts) - 3} more groups" if len(counts) > 3 else ""
        listed = (
            ", ".join(shown) if more else ", ".join(shown[:-1]) + " and " + shown[-1]
        )
        return f"{text}, {listed} alike{more}"
    return text
