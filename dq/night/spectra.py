"""Noise spectra of one channel along the night, frame by frame on a fixed GPS grid."""

from __future__ import annotations

import numpy as np

from dq.conditioning.disturbed import undisturbed
from dq.conditioning.spectrum import (
    CORRELATED,
    combine_frames,
    median_mean,
    periodograms,
)
from dq.conditioning.whiten import difference
from dq.night.stream import Piece
from dq.segments import Segments

_NS = 1_000_000_000

#: A block's spectrum rests on at least this many segments; fewer leave the median of
#: the even and of the odd ones without meaning (own choice).
MIN_SEGMENTS = 8


class FrameSpectra:
    """Median-mean spectra of the frames, each computed once and kept while needed.

    Parameters
    ----------
    rate : float
        Hz.
    segment, hop : int
        Samples of a segment and between starts.
    frame_ns, span_ns : int
        Length of a frame, and how far around a block frames are used.
    """

    def __init__(self, *, rate, segment: int, hop: int, frame_ns: int, span_ns: int):
        self.rate = rate
        self.segment = segment
        self.hop = hop
        self.frame_ns = frame_ns
        self.span_ns = span_ns
        self._frames: dict[int, tuple[np.ndarray, int] | None] = {}

    def update(self, pieces: list[Piece], start_ns: int, end_ns: int, bad: Segments):
        """Compute the frames that ``[start_ns, end_ns)`` needs and forget older ones.

        Segments that touch ``bad`` time are left out while others remain.
        """
        first = (start_ns - self.span_ns) // self.frame_ns
        last = -((-(end_ns + self.span_ns)) // self.frame_ns)
        self._frames = {k: v for k, v in self._frames.items() if k >= first}
        for frame in range(first, last):
            if frame not in self._frames:
                self._frames[frame] = self._measure(pieces, frame, bad)

    def around(self, start_ns: int, end_ns: int) -> np.ndarray | None:
        """Give the spectrum for a block; None: too little data."""
        first = (start_ns - self.span_ns) // self.frame_ns
        last = -((-(end_ns + self.span_ns)) // self.frame_ns)
        frames = [self._frames.get(k) for k in range(first, last)]
        frames = [f for f in frames if f is not None]
        counts = [n for _, n in frames]
        if sum(counts) < MIN_SEGMENTS:
            return None
        return combine_frames([s for s, _ in frames], counts)

    def _measure(self, pieces, frame: int, bad: Segments):
        hop_ns = round(self.hop * _NS / self.rate)
        per_frame = max(self.frame_ns // hop_ns, 1)
        origin = frame * self.frame_ns
        power, number = [], []
        for piece in pieces:
            low = max(-((origin - piece.start_ns) // hop_ns), 0)
            first = piece.index_from(origin + low * hop_ns)
            room = (len(piece) - first - self.segment) // self.hop + 1
            count = min(per_frame - low, room)
            if count <= 0:
                continue
            stop = first + (count - 1) * self.hop + self.segment
            # one sample more on either side feeds the difference, where there is one
            begin = max(first - 1, 0)
            values = difference(piece.values[begin : stop + 1])
            if first == 0:
                values = np.concatenate([values[:1], values])
            if stop == len(piece):
                values = np.concatenate([values, values[-1:]])
            power.append(
                periodograms(
                    values,
                    sample_rate=float(self.rate),
                    segment=self.segment,
                    hop=self.hop,
                )
            )
            number.append(low + np.arange(count))
        if not power:
            return None
        power, number = np.concatenate(power), np.concatenate(number)
        good = self._good(origin + number * hop_ns, bad)
        good &= power.max(axis=1) > 0
        if not good.any():
            return None
        # numbers count on from GPS 0, so that parity does not depend on the frame
        parity = (number + frame * per_frame) % 2
        if not good.all():
            power, parity = power[good], parity[good]
        used = undisturbed(power, correlated=CORRELATED)
        return median_mean(power, parity, used), len(power)

    def _good(self, starts_ns: np.ndarray, bad: Segments) -> np.ndarray:
        if not bad:
            return np.ones(len(starts_ns), dtype=bool)
        length = round(self.segment * _NS / self.rate)
        blurred = bad.pad(length, 0)
        good = ~blurred.contains(starts_ns)
        return good if good.any() else ~good
