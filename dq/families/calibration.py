"""Forest votes turned into probabilities.

A forest's votes avoid 0 and 1 (Niculescu-Mizil & Caruana 2005, ICML, 625; from
memory): its trees disagree even where the family is sure. Four published maps are
tried on votes of models that had not seen the example, and the one with the smallest
Brier score on held-out blocks of time is kept.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from dq.families.scores import brier, one_hot

#: The maps that are tried, simplest first; a tie goes to the simpler one.
METHODS = ("none", "temperature", "platt", "beta", "isotonic")

#: Votes are held away from 0 and 1 by this before a logarithm; a forest of 200 trees
#: cannot tell a smaller share from none.
FLOOR = 1e-3

#: Weight of the pull toward the identity, in examples: a family with a handful of
#: examples must not get a wild map of its own (own choice).
_PRIOR = 1.0


@dataclass(frozen=True)
class VoteMap:
    """A fitted map from votes to probabilities.

    Attributes
    ----------
    method : str
        One of ``METHODS``.
    parameters : ndarray
        ``temperature``: shape (1,), the exponent. ``platt``: (families, 2), slope and
        offset on the log-odds. ``beta``: (families, 3), a, b, c of a ln v - b ln(1-v)
        + c. ``isotonic``: (families, 2, points), votes and values of the steps.
    """

    method: str
    parameters: np.ndarray

    def __call__(self, votes: np.ndarray) -> np.ndarray:
        """Give probabilities that sum to 1, shape (n, families)."""
        if self.method == "none":
            return votes
        if self.method == "temperature":
            logs = self.parameters[0] * np.log(np.clip(votes, FLOOR, None))
            shares = np.exp(logs - logs.max(axis=1, keepdims=True))
        elif self.method == "isotonic":
            columns = [
                np.interp(votes[:, k], points, values)
                for k, (points, values) in enumerate(self.parameters)
            ]
            shares = np.stack(columns, axis=1)
        else:
            odds = np.einsum("nkj,kj->nk", _terms(votes, self.method), self.parameters)
            shares = _sigmoid(odds)
        return _normalised(shares, votes)


def fit_map(
    method: str, votes: np.ndarray, truth: np.ndarray, weight: np.ndarray
) -> VoteMap:
    """Fit one map.

    Parameters
    ----------
    method : str
    votes : ndarray, shape (n, families)
        Of models that had not seen the examples.
    truth : ndarray of int, shape (n,)
        Each example's column.
    weight : ndarray, shape (n,)

    Returns
    -------
    VoteMap
    """
    target = np.zeros_like(votes)
    target[np.arange(len(truth)), truth] = 1.0
    if method == "none":
        return VoteMap(method, np.zeros(0))
    if method == "temperature":
        return VoteMap(method, _fit_temperature(votes, truth, weight))
    if method == "isotonic":
        return VoteMap(method, _fit_isotonic(votes, target, weight))
    terms = _terms(votes, method)
    rows = [
        _fit_logistic(terms[:, k], target[:, k], weight, method)
        for k in range(votes.shape[1])
    ]
    return VoteMap(method, np.array(rows))


def choose_map(
    votes: np.ndarray, truth: np.ndarray, fold: np.ndarray, weight: np.ndarray
) -> tuple[str, dict[str, float]]:
    """Choose the method with the smallest held-out Brier score.

    Parameters
    ----------
    votes, truth, weight
        As for :func:`fit_map`.
    fold : ndarray of int, shape (n,)
        Examples of one stretch of time share a fold.

    Returns
    -------
    method : str
    scores : dict of str to float
        Held-out Brier score of every method.
    """
    columns = np.arange(votes.shape[1])
    target = one_hot(truth, columns)
    scores = {
        m: brier(mapped_out_of_fold(m, votes, truth, fold, weight), target)
        for m in METHODS
    }
    return min(METHODS, key=lambda m: (round(scores[m], 6), METHODS.index(m))), scores


def mapped_out_of_fold(
    method: str,
    votes: np.ndarray,
    truth: np.ndarray,
    fold: np.ndarray,
    weight: np.ndarray,
) -> np.ndarray:
    """Map each fold's votes with a map fitted on the other folds."""
    out = np.empty_like(votes)
    for f in np.unique(fold):
        inside = fold == f
        rest = ~inside
        out[inside] = fit_map(method, votes[rest], truth[rest], weight[rest])(
            votes[inside]
        )
    return out


def _normalised(shares: np.ndarray, votes: np.ndarray) -> np.ndarray:
    total = shares.sum(axis=1, keepdims=True)
    # isotonic maps may call every family impossible; then the votes speak
    return np.where(total > 1e-9, shares / np.maximum(total, 1e-9), votes)


def _sigmoid(x: np.ndarray) -> np.ndarray:
    return 0.5 * (1.0 + np.tanh(0.5 * x))


def _terms(votes: np.ndarray, method: str) -> np.ndarray:
    """Give the inputs of the logistic maps, shape (n, families, parameters)."""
    v = np.clip(votes, FLOOR, 1.0 - FLOOR)
    ones = np.ones_like(v)
    if method == "platt":
        return np.stack([np.log(v) - np.log1p(-v), ones], axis=2)
    return np.stack([np.log(v), -np.log1p(-v), ones], axis=2)


def _fit_logistic(terms, target, weight, method) -> np.ndarray:
    """Fit logistic parameters, pulled toward the identity.

    Platt 1999, in Advances in Large Margin Classifiers, 61; beta map Kull, Silva Filho
    & Flach 2017, AISTATS (slopes held at 0 or above, as theirs).
    """
    from scipy.optimize import minimize

    start = np.array([1.0, 0.0] if method == "platt" else [1.0, 1.0, 0.0])

    def loss(b):
        odds = terms @ b
        value = weight @ (np.logaddexp(0.0, odds) - target * odds)
        slope = terms.T @ (weight * (_sigmoid(odds) - target))
        pull = b - start
        return value + 0.5 * _PRIOR * pull @ pull, slope + _PRIOR * pull

    bounds = [(0.0, None)] * (len(start) - 1) + [(None, None)]
    return minimize(loss, start, jac=True, method="L-BFGS-B", bounds=bounds).x


def _fit_temperature(votes, truth, weight) -> np.ndarray:
    """Fit the exponent (Guo et al. 2017, ICML, 1321, on logarithms of votes)."""
    from scipy.optimize import minimize_scalar

    logs = np.log(np.clip(votes, FLOOR, None))
    own = logs[np.arange(len(truth)), truth]

    def loss(exponent):
        scaled = exponent * logs
        top = scaled.max(axis=1)
        total = top + np.log(np.exp(scaled - top[:, None]).sum(axis=1))
        return float(weight @ (total - exponent * own))

    found = minimize_scalar(loss, bounds=(0.05, 20.0), method="bounded")
    return np.array([found.x])


def _fit_isotonic(votes, target, weight) -> np.ndarray:
    """Fit rising steps (Zadrozny & Elkan 2002, KDD, 694), held on a common grid."""
    from sklearn.isotonic import isotonic_regression

    # 201 points hold every step of a 200-tree forest's votes
    grid = np.linspace(0.0, 1.0, 201)
    out = np.empty((votes.shape[1], 2, len(grid)))
    for k in range(votes.shape[1]):
        order = np.argsort(votes[:, k], kind="stable")
        v, t, w = votes[order, k], target[order, k], weight[order]
        points, first = np.unique(v, return_index=True)
        mass = np.add.reduceat(w, first)
        mean = np.add.reduceat(w * t, first) / np.maximum(mass, 1e-300)
        steps = isotonic_regression(
            mean, sample_weight=np.maximum(mass, 1e-12), y_min=0.0, y_max=1.0
        )
        out[k] = grid, np.interp(grid, points, steps)
    return out
