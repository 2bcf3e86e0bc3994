"""Is an example like anything that was labelled?

A second forest learns to tell the known families from chimeras: examples put together
feature by feature from two members of different families, so every single value is
usual while the combination is not. What the forest takes for a chimera, or does not
place in the family that the sorter chose, is new. Putting artificial outliers from
known examples into training follows published practice (Shi & Horvath 2006, J. Comput.
Graph. Stat. 15 118; Zhou, Ye & Zhan 2021, CVPR, 4401; both from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from sklearn.ensemble import RandomForestClassifier

from dq.families.forest import Forest, pack

#: Trees of the second forest; 100 lost one percent of the new ones, 200 won nothing.
_TREES = 100

#: Share of the features that a node may choose from.
_FEATURES = 0.4

#: Examples of one family that are used at most: bounds the time, and keeps a family
#: with thousands of labels from outweighing the others.
_FAMILY_EXAMPLES = 250

#: Chimeras for each example.
_CHIMERAS = 1.0

#: Share of the features that a chimera takes from its second parent.
_SECOND = (0.1, 0.9)

#: A leaf's smallest number of examples: leaves of one give votes that tie.
_LEAF = 2


@dataclass(frozen=True)
class NoveltyModel:
    """A forest whose last column is the vote for a chimera."""

    forest: Forest

    def score(self, x: np.ndarray, votes: np.ndarray) -> np.ndarray:
        """Give the raw novelty, 0..1.

        Parameters
        ----------
        x : ndarray, shape (n, features)
        votes : ndarray, shape (n, families)
            The sorter's.

        Returns
        -------
        ndarray, shape (n,)
            Share of the votes that do not go to the family which the sorter chose.
        """
        shares = self.forest.vote(x)
        return 1.0 - shares[np.arange(len(x)), votes.argmax(axis=1)]


def fit_novelty(x: np.ndarray, family: np.ndarray, *, families: int, seed: int):
    """Grow the second forest.

    Parameters
    ----------
    x : ndarray, shape (n, features)
        NaN where a feature is missing.
    family : ndarray of int, shape (n,)
        At least two different ones.
    families : int
        Number of columns; a training side of a split may lack some.
    seed : int

    Returns
    -------
    NoveltyModel
    """
    rng = np.random.default_rng(seed)
    kept = _thinned(family, rng)
    x, family = x[kept], family[kept]
    mixed = chimeras(x, family, round(_CHIMERAS * len(x)), rng=rng)
    grown = RandomForestClassifier(
        n_estimators=_TREES,
        max_features=_FEATURES,
        min_samples_leaf=_LEAF,
        random_state=seed,
        n_jobs=1,
    ).fit(
        np.concatenate([x, mixed]),
        np.concatenate([family, np.full(len(mixed), families)]),
    )
    return NoveltyModel(pack(grown.estimators_, grown.classes_, families + 1))


def chimeras(
    x: np.ndarray, family: np.ndarray, count: int, *, rng: np.random.Generator
) -> np.ndarray:
    """Put together examples from members of two different families.

    Returns
    -------
    ndarray, shape (count, features)
        Empty where there is one family only.
    """
    if len(np.unique(family)) < 2:
        return np.empty((0, x.shape[1]))
    first = rng.integers(0, len(x), count)
    second = np.empty(count, dtype=np.int64)
    left = np.arange(count)
    while len(left):
        second[left] = rng.integers(0, len(x), len(left))
        left = left[family[first[left]] == family[second[left]]]
    share = rng.uniform(*_SECOND, count)
    taken = rng.random((count, x.shape[1])) < share[:, None]
    return np.where(taken, x[second], x[first])


def _thinned(family: np.ndarray, rng: np.random.Generator) -> np.ndarray:
    """Give rows with at most ``_FAMILY_EXAMPLES`` of each family, in order."""
    kept = []
    for k in np.unique(family):
        rows = np.flatnonzero(family == k)
        if len(rows) > _FAMILY_EXAMPLES:
            rows = rng.choice(rows, _FAMILY_EXAMPLES, replace=False)
        kept.append(rows)
    return np.sort(np.concatenate(kept))
