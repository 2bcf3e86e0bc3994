"""A moving window over one channel's samples: each sample is read once.

The window holds the finite, ready samples around the batch being analysed, as
contiguous pieces; memory is bounded by the window.
"""

from __future__ import annotations

from fractions import Fraction

import numpy as np

from dq.segments import Segments

_NS = 1_000_000_000


class Piece:
    """Contiguous samples: ``start_ns`` is the time of ``values[0]``."""

    def __init__(self, start_ns: int, rate: Fraction, values: np.ndarray):
        self.start_ns = int(start_ns)
        self.rate = rate
        self.values = values

    def __len__(self) -> int:
        return len(self.values)

    @property
    def end_ns(self) -> int:
        """Time just past the last sample."""
        return self.time_ns(len(self.values))

    def time_ns(self, index: int) -> int:
        """Give the time of sample ``index``, which may lie outside."""
        return self.start_ns + round(Fraction(index * _NS) / self.rate)

    def index_from(self, time_ns: int) -> int:
        """Give the first sample at or after a time (within 5 % of a sample)."""
        exact = Fraction(time_ns - self.start_ns) * self.rate / _NS
        return int(-((-(exact - Fraction(1, 20))) // 1))


class SampleWindow:
    """The pieces of a channel in a window that only moves forward.

    Parameters
    ----------
    data : ChannelData
        What is read from.
    ready : Segments
        Samples outside are not read.
    """

    def __init__(self, data, ready: Segments):
        self._data = data
        self._ready = ready
        self._read_to: int | None = None
        self.pieces: list[Piece] = []

    def move(self, start_ns: int, end_ns: int, keep_ns: int | None = None) -> None:
        """Drop what ends before ``keep_ns`` and read from ``start_ns`` to ``end_ns``.

        What was read before is not read again; ``keep_ns`` may lie after ``start_ns``
        where older samples have served their purpose.
        """
        begin = start_ns
        if self._read_to is not None and self._read_to > start_ns:
            begin = self._read_to
            self._drop_before(max(start_ns, keep_ns or start_ns))
        else:
            self._drop_before(start_ns)
        for low, high in self._ready.clip(begin, max(end_ns, begin)):
            for series in self._data.read(low, high):
                self._append(Piece(series.start_ns, series.rate, series.values))
        self._read_to = max(end_ns, begin)

    def _drop_before(self, start_ns: int) -> None:
        kept = []
        for piece in self.pieces:
            if piece.end_ns <= start_ns:
                continue
            skip = max(piece.index_from(start_ns), 0)
            kept.append(Piece(piece.time_ns(skip), piece.rate, piece.values[skip:]))
        self.pieces = [p for p in kept if len(p)]

    def _append(self, piece: Piece) -> None:
        if not len(piece):
            return
        if self.pieces:
            last = self.pieces[-1]
            tolerance = Fraction(_NS, 20) / last.rate
            if abs(piece.start_ns - last.end_ns) <= tolerance:
                joined = np.concatenate([last.values, piece.values])
                self.pieces[-1] = Piece(last.start_ns, last.rate, joined)
                return
        self.pieces.append(piece)
