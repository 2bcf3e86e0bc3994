"""A channel held in memory, with the face of ``dq.store.ChannelData``."""

from __future__ import annotations

from fractions import Fraction

import numpy as np

from dq.segments import Segments
from dq.store import Series

NS = 1_000_000_000


class MemoryChannel:
    """One stretch of samples; NaN marks missing ones."""

    def __init__(self, name, rate, start_ns, values):
        self.name = name
        self.rate = Fraction(rate)
        self.start_ns = start_ns
        self.values = values
        length = round(len(values) * NS / self.rate)
        self.recorded = Segments.of([(start_ns, start_ns + length)])
        self.samples_read = 0
        self.unit = ""
        self.problems, self.read_problems = [], []

    def read(self, start_ns, end_ns):
        """Give the finite stretches in ``[start_ns, end_ns)``."""
        first = max(-(-(start_ns - self.start_ns) * self.rate // NS), 0)
        stop = min(-(-(end_ns - self.start_ns) * self.rate // NS), len(self.values))
        part = self.values[int(first) : int(stop)]
        self.samples_read += len(part)
        edges = np.flatnonzero(np.diff(np.isfinite(part), prepend=False, append=False))
        return [
            Series(
                self.start_ns + round(Fraction(int(first + a) * NS) / self.rate),
                self.rate,
                part[a:b],
            )
            for a, b in zip(edges[::2], edges[1::2], strict=True)
        ]
