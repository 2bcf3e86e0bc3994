"""Whether an example is like anything that was labelled.

Three signs are put together: the sorter's forest is of two minds; the example lies far
from the middle of the family that the forest chose (``clouds``); and a second forest
takes it for a chimera, put together feature by feature from members of two families, so
that every value is usual and the combination is not (artificial outliers in training:
Shi & Horvath 2006, J. Comput. Graph. Stat. 15 118; from memory). Each sign becomes the
share of known examples, judged by models without them, that show it as strongly; the
shares are combined after Fisher 1932.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from sklearn.ensemble import ExtraTreesClassifier

from dq.families.clouds import Clouds, fit_clouds
from dq.families.conformal import conformal_bar
from dq.families.forest import Forest, pack

#: Examples of one family that the second forest is grown from at most: bounds the time.
_FAMILY_EXAMPLES = 150

#: Shares of the features that a chimera takes from its second parent; more than half
#: would only swap the parents.
_SECOND = (0.05, 0.5)

#: Families that the sorter chose for fewer examples than this are judged by all.
_FEWEST = 10

#: Added to a family's spread of distances, so that a family whose examples are all
#: alike does not turn away everything else (own choice).
_SOFTENING = 0.02


@dataclass(frozen=True)
class Signs:
    """What is measured of an example: the clouds and the second forest."""

    clouds: Clouds
    forest: Forest

    def measure(self, x: np.ndarray, votes: np.ndarray) -> np.ndarray:
        """Give the three signs, shape (n, 3): doubt, distance, chimera.

        Parameters
        ----------
        x : ndarray, shape (n, features)
        votes : ndarray, shape (n, families)
            The sorter's.
        """
        doubt = 1.0 - votes.max(axis=1)
        distance = self.clouds.distance(x, votes.argmax(axis=1))
        return np.stack([doubt, distance, self.forest.vote(x)[:, -1]], axis=1)


@dataclass(frozen=True)
class Tails:
    """How strong each sign is among known examples.

    Attributes
    ----------
    middle, spread : ndarray, shape (families,)
        Median of the distance where the sorter chose the family, and its upper spread.
    known : ndarray, shape (3, n)
        Sorted signs of the known examples.
    """

    middle: np.ndarray
    spread: np.ndarray
    known: np.ndarray

    def combine(self, signs: np.ndarray, chosen: np.ndarray) -> np.ndarray:
        """Give the raw novelty: the sum of -ln of the three shares.

        Parameters
        ----------
        signs : ndarray, shape (n, 3)
        chosen : ndarray of int, shape (n,)
            Family that the sorter chose.
        """
        scaled = _standardised(signs, chosen, self.middle, self.spread)
        return sum(_surprise(scaled[:, j], self.known[j]) for j in range(3))


def fit_signs(
    x: np.ndarray, family: np.ndarray, *, families: int, trees: int, seed: int
) -> Signs:
    """Learn what the signs need from examples.

    Parameters
    ----------
    x : ndarray, shape (n, features)
        NaN where a feature is missing.
    family : ndarray of int, shape (n,)
    families : int
        Number of columns; a training side of a split may lack some.
    trees, seed : int

    Returns
    -------
    Signs
    """
    rng = np.random.default_rng(seed)
    clouds = fit_clouds(x, family, families=families)
    kept = _thinned(family, rng)
    x, family = x[kept], family[kept]
    mixed = chimeras(x, family, len(x), rng=rng)
    grown = ExtraTreesClassifier(
        n_estimators=trees,
        max_features=None,
        random_state=seed,
        n_jobs=1,
    ).fit(
        np.concatenate([x, mixed]),
        np.concatenate([family, np.full(len(mixed), families)]),
    )
    return Signs(clouds, pack(grown.estimators_, grown.classes_, families + 1))


def fit_tails(signs: np.ndarray, chosen: np.ndarray, families: int) -> Tails:
    """Measure the signs of known examples, out of fold.

    Parameters
    ----------
    signs : ndarray, shape (n, 3)
    chosen : ndarray of int, shape (n,)
    families : int

    Returns
    -------
    Tails
    """
    distance = signs[:, 1]
    middle, spread = np.empty(families), np.empty(families)
    for k in range(families):
        own = distance[chosen == k]
        own = own if len(own) >= _FEWEST else distance
        middle[k] = np.median(own)
        spread[k] = np.quantile(own, 0.9) - middle[k] + _SOFTENING
    scaled = _standardised(signs, chosen, middle, spread)
    return Tails(middle, spread, np.sort(scaled, axis=0).T.copy())


def _standardised(signs, chosen, middle, spread) -> np.ndarray:
    out = signs.copy()
    out[:, 1] = (signs[:, 1] - middle[chosen]) / spread[chosen]
    return out


def _surprise(values: np.ndarray, known: np.ndarray) -> np.ndarray:
    """Give -ln of the share of known values that are as large; beyond all, a tail.

    The tail falls exponentially with the mean excess over the 90 % quantile.
    """
    count = len(known)
    share = (count - np.searchsorted(known, values, side="left") + 1.0) / (count + 1.0)
    start = known[int(0.9 * (count - 1))]
    excess = max(float((known[known >= start] - start).mean()), 1e-3)
    return -np.log(share) + np.maximum(values - known[-1], 0.0) / excess


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


def novelty_bar(raw: np.ndarray, reject: float) -> float:
    """Give the raw novelty that a share ``reject`` of known examples exceeds."""
    bar = conformal_bar(raw, reject)
    return max(bar if np.isfinite(bar) else float(raw.max(initial=0.0)), 1e-9)
