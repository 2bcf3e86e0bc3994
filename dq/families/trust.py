"""Which labels models that had not seen them bear out, and which they contradict.

Hands name a few transients in a hundred wrongly. Those would widen the cloud of a
family by the distance to another one, and be strange members for whose sake sets grow.
Examples are judged by votes of models without their block of time (confident learning:
Northcutt, Jiang & Chuang 2021, J. Artif. Intell. Res. 70 1373; from memory), with
bounds of own choice.
"""

from __future__ import annotations

import numpy as np

#: Least share of votes for the labelled family that bears a label out. Chosen on
#: simulated families left out of training (0.1, 0.3 and a majority were tried).
_BORNE_OUT = 0.3

#: A label is contradicted where another family has at least the first share of votes
#: and its own at most the second. On simulated families that held for 0.4 % of right
#: labels, and for 2.0 % of labels of which 2 % were wrong.
_RIVAL, _OWN = 0.6, 0.1


def borne_out(votes: np.ndarray, truth: np.ndarray) -> np.ndarray:
    """Give the examples that a family may be described by: bool, shape (n,).

    Parameters
    ----------
    votes : ndarray, shape (n, families)
        Out of fold.
    truth : ndarray of int, shape (n,)
        Each example's labelled column.

    Notes
    -----
    Where less than half of a family's examples are borne out, it is the family that is
    hard to tell, not its labels that are wrong, and all of them count.
    """
    good = votes[np.arange(len(truth)), truth] >= _BORNE_OUT
    families = votes.shape[1]
    count = np.bincount(truth, minlength=families)
    hard = np.bincount(truth, weights=good, minlength=families) < 0.5 * count
    return good | hard[truth]


def contradicted(votes: np.ndarray, truth: np.ndarray) -> np.ndarray:
    """Give the examples whose label is most likely wrong: bool, shape (n,)."""
    own = votes[np.arange(len(truth)), truth]
    return (own <= _OWN) & (votes.max(axis=1) >= _RIVAL)
