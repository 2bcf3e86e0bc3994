"""Features on one scale, so that distances between examples mean something."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

#: Scaled features are held within this many spreads, so that one wild value does not
#: drown the others (own choice; normal values stay within 5).
REACH = 12.0


@dataclass(frozen=True)
class Space:
    """A scale for every feature, from examples.

    Attributes
    ----------
    centre, spread : ndarray, shape (features,)
        Median, and standard deviation of the values held within ten robust ones.
        A feature without any spread among the examples has spread 1, so that a value
        elsewhere still counts.
    """

    centre: np.ndarray
    spread: np.ndarray

    def place(self, x: np.ndarray) -> np.ndarray:
        """Scale; a missing value stands at the centre. Gives float32, (n, features)."""
        z = (np.asarray(x, float) - self.centre) / self.spread
        z = np.where(np.isfinite(z), z, 0.0)
        return np.ascontiguousarray(np.clip(z, -REACH, REACH), dtype=np.float32)


def fit_space(x: np.ndarray) -> Space:
    """Measure every feature's centre and spread."""
    masked = np.ma.masked_invalid(np.asarray(x, float))
    centre = np.ma.median(masked, axis=0).filled(0.0)
    deviation = masked - centre
    robust = 1.4826 * np.ma.median(np.abs(deviation), axis=0).filled(0.0)
    # a normal law's standard deviation is 1.4826 median absolute deviations
    bound = np.where(robust > 0, 10.0 * robust, np.inf)
    spread = np.ma.clip(deviation, -bound, bound).std(axis=0).filled(0.0)
    return Space(centre, np.where(spread > 1e-12, spread, 1.0))
