"""A grown forest as plain arrays: what is stored, checked and asked for votes.

The trees are grown by scikit-learn. Kept as arrays they can be read from a file without
running any code of it, checked so that no index leads astray, and used with any
version of the library.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numba import njit

#: Rows that are voted on together, so that one tree's nodes stay in the cache.
_BATCH = 2048


@dataclass(frozen=True)
class Forest:
    """All trees' nodes, one after the other.

    Attributes
    ----------
    roots : ndarray of int32, shape (trees,)
        Index of each tree's first node.
    feature : ndarray of int32, shape (nodes,)
        Feature that a node asks for; -1 in a leaf.
    threshold : ndarray of float64, shape (nodes,)
        A value up to it goes left.
    left, right : ndarray of int32, shape (nodes,)
        Index of the next node, always beyond the node's own. In a leaf ``left`` is the
        row of ``votes`` and ``right`` is 0.
    missing_left : ndarray of bool, shape (nodes,)
        Whether a missing value goes left.
    votes : ndarray of float32, shape (leaves, families)
        What a leaf says; each row sums to 1.
    """

    roots: np.ndarray
    feature: np.ndarray
    threshold: np.ndarray
    left: np.ndarray
    right: np.ndarray
    missing_left: np.ndarray
    votes: np.ndarray

    def vote(self, x: np.ndarray) -> np.ndarray:
        """Give the mean vote of the trees.

        Parameters
        ----------
        x : ndarray, shape (n, features)
            NaN where a feature is missing.

        Returns
        -------
        ndarray of float64, shape (n, families)
        """
        x = np.ascontiguousarray(x, dtype=np.float32)
        out = np.zeros((len(x), self.votes.shape[1]))
        for first in range(0, len(x), _BATCH):
            _add_votes(
                x[first : first + _BATCH],
                self.roots,
                self.feature,
                self.threshold,
                self.left,
                self.right,
                self.missing_left,
                self.votes,
                out[first : first + _BATCH],
            )
        out /= len(self.roots)
        # leaves are rounded to float32; a row must still sum to 1
        return out / out.sum(axis=1, keepdims=True)

    def faults(self, features: int) -> str:
        """Say what makes the arrays unusable, or nothing.

        Every walk must end: a child lies beyond its parent and within the arrays.
        """
        nodes, leaves = len(self.feature), len(self.votes)
        shapes = {len(a) for a in (self.threshold, self.left, self.right)}
        if shapes | {len(self.missing_left)} != {nodes} or self.votes.ndim != 2:
            return "arrays of unequal length"
        if not len(self.roots) or self.roots.min() < 0 or self.roots.max() >= nodes:
            return "a tree without root"
        leaf = self.feature < 0
        if self.feature.max(initial=-1) >= features:
            return "a node asks for a feature that does not exist"
        own = np.arange(nodes)[~leaf]
        for child in (self.left[~leaf], self.right[~leaf]):
            if np.any(child <= own) or np.any(child >= nodes):
                return "a node leads out of its tree"
        rows = self.left[leaf]
        if np.any(rows < 0) or np.any(rows >= leaves):
            return "a leaf without votes"
        sums = self.votes.sum(axis=1)
        if not np.all(np.abs(sums - 1.0) < 1e-4) or np.any(self.votes < 0):
            return "votes that do not sum to 1"
        return ""


@njit(cache=True, nogil=True)
def _add_votes(x, roots, feature, threshold, left, right, missing_left, votes, out):
    for root in roots:
        for i in range(x.shape[0]):
            node = root
            while feature[node] >= 0:
                value = x[i, feature[node]]
                if np.isnan(value):
                    goes_left = missing_left[node]
                else:
                    goes_left = value <= threshold[node]
                node = left[node] if goes_left else right[node]
            row = left[node]
            for k in range(votes.shape[1]):
                out[i, k] += votes[row, k]


def pack(trees: list, columns: np.ndarray, families: int) -> Forest:
    """Gather fitted scikit-learn trees.

    Parameters
    ----------
    trees : list of sklearn.tree.DecisionTreeClassifier
    columns : ndarray of int
        For each class of the trees, its column among all families (a training side of
        a split may lack a family).
    families : int

    Returns
    -------
    Forest
    """
    parts: dict[str, list] = {n: [] for n in Forest.__dataclass_fields__}
    nodes = leaves = 0
    for estimator in trees:
        tree = estimator.tree_
        leaf = tree.children_left < 0
        rank = np.cumsum(leaf) - 1 + leaves
        parts["roots"].append(nodes)
        parts["feature"].append(np.where(leaf, -1, tree.feature))
        parts["threshold"].append(np.where(leaf, 0.0, tree.threshold))
        parts["left"].append(np.where(leaf, rank, tree.children_left + nodes))
        parts["right"].append(np.where(leaf, 0, tree.children_right + nodes))
        parts["missing_left"].append(tree.missing_go_to_left.astype(bool) & ~leaf)
        shares = tree.value[leaf, 0, :]
        votes = np.zeros((len(shares), families), dtype=np.float32)
        votes[:, columns] = shares / shares.sum(axis=1, keepdims=True)
        parts["votes"].append(votes)
        nodes += len(leaf)
        leaves += int(leaf.sum())
    kinds = {"threshold": np.float64, "missing_left": bool, "votes": np.float32}
    arrays = {
        n: np.concatenate(p).astype(kinds.get(n, np.int32))
        for n, p in parts.items()
        if n != "roots"
    }
    return Forest(roots=np.array(parts["roots"], dtype=np.int32), **arrays)
