"""The face of the algebra: an immutable list of half-open segments."""

from __future__ import annotations

from collections.abc import Iterable, Iterator

import numpy as np

from dq.segments import algebra
from dq.segments.clock import NS, seconds_text, to_ns


class Segments:
    """Sorted, disjoint, non-abutting half-open segments in integer nanoseconds.

    Parameters
    ----------
    starts, ends : array_like of int
        Nanoseconds, in any order; they are normalised.

    Examples
    --------
    >>> a = Segments.from_seconds([0, 5], [2, 9])
    >>> b = Segments.from_seconds([1], [6])
    >>> a & b, a | b, a - b
    (Segments([1, 2), [5, 6)), Segments([0, 9)), Segments([0, 1), [6, 9)))
    """

    __slots__ = ("ends", "starts")

    def __init__(self, starts=(), ends=()):
        starts, ends = algebra.normalise(starts, ends)
        for name, values in (("starts", starts), ("ends", ends)):
            values = values.copy()
            values.flags.writeable = False
            object.__setattr__(self, name, values)

    def __setattr__(self, name, value):
        raise AttributeError("Segments cannot be changed; make a new one")

    def __reduce__(self):
        return (Segments, (self.starts, self.ends))

    @classmethod
    def from_arrays(cls, starts, ends) -> Segments:
        """Make segments from arrays of nanoseconds."""
        return cls(starts, ends)

    @classmethod
    def of(cls, pairs: Iterable[tuple[int, int]]) -> Segments:
        """Make segments from (start, end) pairs in nanoseconds."""
        pairs = list(pairs)
        return cls([p[0] for p in pairs], [p[1] for p in pairs])

    @classmethod
    def from_seconds(cls, starts, ends) -> Segments:
        """Make segments from GPS seconds: text and integers exactly, floats rounded."""
        return cls([to_ns(s) for s in starts], [to_ns(e) for e in ends])

    @classmethod
    def none(cls) -> Segments:
        """Give no segments."""
        return cls()

    @property
    def _pair(self) -> algebra.Pair:
        return self.starts, self.ends

    def __or__(self, other: Segments) -> Segments:
        return Segments(*algebra.union(self._pair, other._pair))

    def __and__(self, other: Segments) -> Segments:
        return Segments(*algebra.intersect(self._pair, other._pair))

    def __sub__(self, other: Segments) -> Segments:
        return Segments(*algebra.subtract(self._pair, other._pair))

    def complement(self, start_ns: int, end_ns: int) -> Segments:
        """Give what of ``[start_ns, end_ns)`` is not covered."""
        return Segments(*algebra.complement(self._pair, start_ns, end_ns))

    def clip(self, start_ns: int, end_ns: int) -> Segments:
        """Give what lies inside ``[start_ns, end_ns)``."""
        if end_ns <= start_ns:
            return Segments()
        return self & Segments([start_ns], [end_ns])

    def contains(self, times_ns) -> np.ndarray:
        """Say for each time (nanoseconds) whether it is covered."""
        return algebra.contains(self._pair, times_ns)

    def index_of(self, times_ns) -> np.ndarray:
        """Give the number of the covering segment, -1 where there is none."""
        return algebra.index_of(self._pair, times_ns)

    def pad(self, before_ns: int, after_ns: int | None = None) -> Segments:
        """Widen by ``before_ns`` and ``after_ns`` (default: the same); < 0 shrinks."""
        after_ns = before_ns if after_ns is None else after_ns
        return Segments(*algebra.pad(self._pair, int(before_ns), int(after_ns)))

    def round_outward(self, step_ns: int) -> Segments:
        """Move the borders outward to multiples of ``step_ns``."""
        return Segments(
            self.starts // step_ns * step_ns, -(-self.ends // step_ns) * step_ns
        )

    @property
    def total_ns(self) -> int:
        """Summed length, nanoseconds."""
        return algebra.total(self._pair)

    @property
    def total_s(self) -> float:
        """Summed length, seconds."""
        return self.total_ns / NS

    def __len__(self) -> int:
        return len(self.starts)

    def __bool__(self) -> bool:
        return len(self.starts) > 0

    def __iter__(self) -> Iterator[tuple[int, int]]:
        return zip(self.starts.tolist(), self.ends.tolist(), strict=True)

    def __eq__(self, other) -> bool:
        if not isinstance(other, Segments):
            return NotImplemented
        return np.array_equal(self.starts, other.starts) and np.array_equal(
            self.ends, other.ends
        )

    def __hash__(self) -> int:
        return hash((self.starts.tobytes(), self.ends.tobytes()))

    def __repr__(self) -> str:
        parts = [f"[{seconds_text(s)}, {seconds_text(e)})" for s, e in self]
        if len(parts) > 6:
            parts = [*parts[:3], f"... {len(parts) - 5} more ...", *parts[-2:]]
        return f"Segments({', '.join(parts)})"
