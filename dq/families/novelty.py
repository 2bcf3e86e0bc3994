"""How strange an example would be as a member of each family that was labelled.

Three signs are put together: the sorter's forest gives the family few votes; the
example lies far from the family's middle (``clouds``); and a second forest takes it for
a chimera, put together feature by feature from members of two families, so that every
value is usual and the combination is not (artificial outliers in training: Shi &
Horvath 2006, J. Comput. Graph. Stat. 15 118; from memory). Each sign becomes the share
of known examples, judged by models without them, that show it as strongly towards the
family that the sorter chose for them; the shares are combined after Fisher 1932.
Novelty is the strangeness of the family that the sorter chooses.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from sklearn.ensemble import ExtraTreesClassifier

from dq.families.clouds import Clouds, fit_clouds
from dq.families.conformal import conformal_bar
from dq.families.forest import Forest, pack

#: Examples of one family that the second forest is grown from at most: bounds the time.
#: 150 examples, and all features at every split, gave the same mean share of declined
#: ones, which for single families moved by a tenth from seed to seed.
_FAMILY_EXAMPLES = 250

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
    """What is measured of an example besides votes: clouds and second forest."""

    clouds: Clouds
    forest: Forest

    def measure(self, x: np.ndarray) -> np.ndarray:
        """Give the distance from each family's cloud, and last the chimera vote.

        Parameters
        ----------
        x : ndarray, shape (n, features)

        Returns
        -------
        ndarray, shape (n, families + 1)
        """
        chimera = self.forest.vote(x)[:, -1:]
        return np.concatenate([self.clouds.distances(x), chimera], axis=1)


@dataclass(frozen=True)
class Tails:
    """How strong each sign is among known examples.

    Attributes
    ----------
    middle, spread : ndarray, shape (families,)
        Median of the distance where the sorter chose the family, and its upper spread.
    known : ndarray, shape (3, n)
        Sorted signs of the known examples, as members of the family that the sorter
        chose: votes of other families, distance, chimera.
    """

    middle: np.ndarray
    spread: np.ndarray
    known: np.ndarray

    def combine(self, votes: np.ndarray, signs: np.ndarray) -> np.ndarray:
        """Give the strangeness as a member of each family: the sum of -ln of shares.

        Parameters
        ----------
        votes : ndarray, shape (n, families)
            The sorter's.
        signs : ndarray, shape (n, families + 1)

        Returns
        -------
        ndarray, shape (n, families)
        """
        distance = (signs[:, :-1] - self.middle) / self.spread
        return (
            _surprise(1.0 - votes, self.known[0])
            + _surprise(distance, self.known[1])
            + _surprise(signs[:, -1:], self.known[2])
        )


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
        max_features="sqrt",
        random_state=seed,
        n_jobs=1,
    ).fit(
        np.concatenate([x, mixed]),
        np.concatenate([family, np.full(len(mixed), families)]),
    )
    forest = pack(grown.estimators_, grown.classes_, families + 1)
    # which family a leaf holds is never asked; two columns vote faster
    chimera = forest.votes[:, -1:]
    return Signs(clouds, replace(forest, votes=np.hstack([1.0 - chimera, chimera])))


def fit_tails(votes: np.ndarray, signs: np.ndarray) -> Tails:
    """Measure the signs of known examples, out of fold.

    Parameters
    ----------
    votes : ndarray, shape (n, families)
    signs : ndarray, shape (n, families + 1)

    Returns
    -------
    Tails
    """
    families = votes.shape[1]
    chosen = votes.argmax(axis=1)
    distance = of_chosen(signs[:, :-1], votes)
    middle, spread = np.empty(families), np.empty(families)
    for k in range(families):
        own = distance[chosen == k]
        own = own if len(own) >= _FEWEST else distance
        middle[k] = np.median(own)
        spread[k] = np.quantile(own, 0.9) - middle[k] + _SOFTENING
    scaled = (distance - middle[chosen]) / spread[chosen]
    known = np.stack([1.0 - votes.max(axis=1), scaled, signs[:, -1]])
    return Tails(middle, spread, np.sort(known, axis=1))


def of_chosen(values: np.ndarray, votes: np.ndarray) -> np.ndarray:
    """Give each row's value of the family with most votes, shape (n,)."""
    return values[np.arange(len(votes)), votes.argmax(axis=1)]


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
