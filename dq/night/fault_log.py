"""Suspicious runs of one channel, gathered until its extreme values are known."""

from __future__ import annotations

import math

import numpy as np

from dq.conditioning.faults import classify, equal_runs
from dq.night.stream import Piece
from dq.segments import Segments


class FaultLog:
    """Collects the suspicious runs of the night until the extremes are known."""

    def __init__(self) -> None:
        self.lowest, self.highest = math.inf, -math.inf
        self._rows: list[tuple] = []

    def examine(self, pieces: list[Piece]) -> Segments:
        """Record the runs of the window; give the time of all of them."""
        starts, ends = [], []
        for piece in pieces:
            self.lowest = min(self.lowest, float(piece.values.min()))
            self.highest = max(self.highest, float(piece.values.max()))
            runs = equal_runs(piece.values)
            for i in range(len(runs.first)):
                low = piece.time_ns(int(runs.first[i]))
                high = piece.time_ns(int(runs.first[i] + runs.length[i]))
                value, flat = float(runs.value[i]), bool(runs.flat[i])
                self._rows.append((low, high, value, flat, bool(runs.plateau[i])))
                starts.append(low)
                ends.append(high)
        return Segments.from_arrays(starts, ends)

    def segments(self, wanted: Segments) -> dict[str, Segments]:
        """Give the faults by kind, within the wanted time."""
        low, high, value, flat, plateau = (
            map(np.array, zip(*self._rows, strict=True))
            if self._rows
            else (np.zeros(0, dtype=t) for t in (int, int, float, bool, bool))
        )
        kinds = classify(value, flat, plateau, lowest=self.lowest, highest=self.highest)
        out = {}
        for kind in ("saturation", "flat_line", "dropout"):
            chosen = kinds == kind
            out[kind] = Segments.from_arrays(low[chosen], high[chosen]) & wanted
        return out
