"""Vetoes on a common grid of borders: union dead time and coverage, exactly and fast.

All borders of all vetoes cut the time into *atoms*, inside which every veto is either
on or off. A veto is a list of ranges of atoms. With the open (not yet vetoed) length of
each atom summed up once per step, the dead time that each of many vetoes would add is a
difference of two sums per segment: no union of segments is formed while choosing.
"""

from __future__ import annotations

import numpy as np

from dq.segments import Segments


class Cover:
    """Vetoes, the time they share, and the transients they hold.

    Parameters
    ----------
    vetoes : list of Segments
        Candidates.
    base : Segments
        Time that is vetoed in any case; it costs nothing more.
    times : ndarray of int64, sorted
        Transients, nanoseconds.
    weights : ndarray of int64
        What each is worth, in whole units, so that sums are exact.

    Attributes
    ----------
    count : int
        Number of candidates.
    open_ns : ndarray of int64
        Length of each atom that is not vetoed yet.
    start_open : ndarray of int64
        The same before anything was taken.
    left : ndarray of int64
        Worth of each transient that is not removed yet.
    """

    def __init__(
        self,
        vetoes: list[Segments],
        base: Segments,
        times: np.ndarray,
        weights: np.ndarray,
    ):
        self.count = len(vetoes)
        edges = [base.starts, base.ends]
        edges += [edge for v in vetoes for edge in (v.starts, v.ends)]
        self._edges = np.unique(np.concatenate(edges))
        self.open_ns = np.diff(self._edges)
        self._ranges = [self._range(v) for v in vetoes]
        self._sizes = np.array([len(v) for v in vetoes], dtype=np.int64)
        self._low = np.concatenate([r[0] for r in self._ranges] or [np.zeros(0, int)])
        self._high = np.concatenate([r[1] for r in self._ranges] or [np.zeros(0, int)])
        self._holds = [np.flatnonzero(v.contains(times)) for v in vetoes]
        self._held = np.concatenate([*self._holds, np.zeros(0, dtype=np.intp)])
        self._held_counts = np.array([len(h) for h in self._holds], dtype=np.int64)
        self._close(*self._range(base))
        self.start_open = self.open_ns
        self.left = np.where(base.contains(times), 0, weights).astype(np.int64)

    def _range(self, segments: Segments) -> tuple[np.ndarray, np.ndarray]:
        low = np.searchsorted(self._edges, segments.starts)
        return low, np.searchsorted(self._edges, segments.ends)

    def _covered(self, low: np.ndarray, high: np.ndarray) -> np.ndarray:
        step = np.zeros(len(self._edges), dtype=np.int64)
        np.add.at(step, low, 1)
        np.subtract.at(step, high, 1)
        return np.cumsum(step)[:-1]

    def _close(self, low: np.ndarray, high: np.ndarray) -> None:
        if len(low):
            self.open_ns = np.where(self._covered(low, high) > 0, 0, self.open_ns)

    def _per_veto(self, per_segment: np.ndarray) -> np.ndarray:
        return _sums(per_segment, self._sizes)

    def costs(self) -> np.ndarray:
        """Give the dead time that each candidate would add now, nanoseconds."""
        before = np.append(0, np.cumsum(self.open_ns))
        return self._per_veto(before[self._high] - before[self._low])

    def gain(self, candidate: int) -> int:
        """Give the worth that a candidate would remove now."""
        return int(self.left[self._holds[candidate]].sum())

    def gains(self) -> np.ndarray:
        """Give the worth that each candidate would remove now."""
        return _sums(self.left[self._held], self._held_counts)

    def holds(self, candidate: int) -> np.ndarray:
        """Give the numbers of the transients that a candidate holds."""
        return self._holds[candidate]

    def take(self, candidate: int) -> None:
        """Veto a candidate's time and remove its transients."""
        self._close(*self._ranges[candidate])
        self.left[self._holds[candidate]] = 0

    def state(self) -> tuple[np.ndarray, np.ndarray]:
        """Give what :meth:`restore` takes back."""
        return self.open_ns, self.left.copy()

    def restore(self, state: tuple[np.ndarray, np.ndarray]) -> None:
        """Go back to an earlier state."""
        self.open_ns, self.left = state[0], state[1].copy()

    def shared_costs(self, among: np.ndarray, open_ns: np.ndarray) -> np.ndarray:
        """Give each candidate's dead time with every atom split among its owners.

        Parameters
        ----------
        among : ndarray of bool, shape (count,)
            Candidates that share; the others get what they would add alone.
        open_ns : ndarray of int64
            Lengths of the atoms.

        Returns
        -------
        ndarray of float
            Nanoseconds. Summed over any of those candidates this is at most the dead
            time of their union: an atom is never counted more than once in full.
        """
        rows = np.repeat(among, self._sizes)
        owners = self._covered(self._low[rows], self._high[rows])
        share = open_ns / np.maximum(owners, 1)
        before = np.append(0.0, np.cumsum(share))
        return self._per_veto(before[self._high] - before[self._low])


def _sums(values: np.ndarray, sizes: np.ndarray) -> np.ndarray:
    """Sum runs of the given sizes, which may be empty."""
    before = np.append(values[:0].sum(), np.cumsum(values))
    ends = np.cumsum(sizes)
    return before[ends] - before[ends - sizes]
