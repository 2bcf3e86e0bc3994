"""Every family as a cloud: how far an example lies from its family's middle.

Each feature is first brought to a normal law by its rank among the known examples, so
that skewed and heavy-tailed features count alike; beyond the known range the scale goes
on slowly.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import ndtri

#: Points of the rank table of a feature.
_POINTS = 201

#: Weights of a family's own variances, and of all families' mean variances, against its
#: covariance: a family has fewer examples than pairs of features. Chosen on simulated
#: families left out (0.05 to 0.5, and 0 to 0.3, were tried).
_OWN, _POOLED = 0.5, 0.1

#: Variance that no feature falls below, in the normal scale.
_LEAST = 0.01


@dataclass(frozen=True)
class Clouds:
    """Rank tables and family clouds.

    Attributes
    ----------
    table : ndarray, shape (features, points)
        Rising quantiles of each feature.
    centre : ndarray, shape (families, features)
    whiten : ndarray, shape (families, features, features)
        Turns differences from the centre into independent ones of unit variance.
    """

    table: np.ndarray
    centre: np.ndarray
    whiten: np.ndarray

    def distances(self, x: np.ndarray) -> np.ndarray:
        """Give ln of the mean squared distance per feature from every family's middle.

        Parameters
        ----------
        x : ndarray, shape (n, features)

        Returns
        -------
        ndarray, shape (n, families)
        """
        z = _normal_scores(x, self.table)
        out = np.empty((len(z), len(self.centre)))
        for k, centre in enumerate(self.centre):
            turned = (z - centre) @ self.whiten[k]
            out[:, k] = np.einsum("ij,ij->i", turned, turned)
        return np.log(out / z.shape[1] + 1e-6)


def fit_clouds(x: np.ndarray, family: np.ndarray, *, families: int) -> Clouds:
    """Measure the clouds of known examples.

    A family without examples gets a cloud around the middle of all.
    """
    table = _rank_tables(np.asarray(x, float))
    z = _normal_scores(x, table)
    members = [z[family == k] for k in range(families)]
    centre = np.array([m.mean(axis=0) if len(m) else z.mean(axis=0) for m in members])
    within = np.mean((z - centre[family]) ** 2, axis=0)
    whiten = []
    for m, c in zip(members, centre, strict=True):
        own = (m - c).T @ (m - c) / len(m) if len(m) > 1 else np.diag(within)
        spread = _OWN * np.diag(np.diag(own)) + np.diag(_POOLED * within + _LEAST)
        mixed = (1.0 - _OWN - _POOLED) * own + spread
        whiten.append(np.linalg.inv(np.linalg.cholesky(mixed)).T)
    return Clouds(table, centre, np.array(whiten))


def _rank_tables(x: np.ndarray) -> np.ndarray:
    shares = np.linspace(0.0, 1.0, _POINTS)
    table = np.zeros((x.shape[1], _POINTS))
    for j in range(x.shape[1]):
        known = x[np.isfinite(x[:, j]), j]
        if len(known):
            table[j] = np.quantile(known, shares)
    return table


def _normal_scores(x: np.ndarray, table: np.ndarray) -> np.ndarray:
    """Bring features to a normal scale; a missing value stands at the median."""
    x = np.asarray(x, float)
    shares = np.linspace(0.0, 1.0, table.shape[1])
    # the outermost ranks stand for half a step, or they would be infinite
    half = 0.5 / table.shape[1]
    out = np.zeros(x.shape)
    for j, points in enumerate(table):
        value = x[:, j]
        known = np.isfinite(value)
        low = np.searchsorted(points, value[known], side="left")
        high = np.searchsorted(points, value[known], side="right")
        tied = (low + high - 1) / 2.0 / (len(points) - 1)
        share = np.where(high > low, tied, np.interp(value[known], points, shares))
        score = ndtri(np.clip(share, half, 1.0 - half))
        width = max(points[-1] - points[0], 1e-12)
        over = np.maximum(value[known] - points[-1], points[0] - value[known])
        beyond = np.log1p(np.maximum(over, 0.0) / (0.1 * width))
        out[known, j] = score + np.sign(score) * beyond
    return out
