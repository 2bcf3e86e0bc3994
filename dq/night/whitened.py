"""Whitened blocks of one channel: what tiles and features both start from.

Data come through a window that moves forward; a block's spectrum rests on the frames
around it, and its transform reaches ``pad`` beyond both ends (``night.blocks``).
"""

from __future__ import annotations

import numpy as np

from dq.conditioning.whiten import (
    TOGETHER,
    Whitening,
    design_whitening,
    whitened_spectra,
)
from dq.config import Config
from dq.night.blocks import BlockPlan
from dq.night.fault_log import FaultLog
from dq.night.spectra import FrameSpectra
from dq.night.stream import Piece, SampleWindow
from dq.segments import Segments

_NS = 1_000_000_000


class WhitenedBlocks:
    """The moving window over a channel, with spectra and whitening of its blocks.

    Parameters
    ----------
    data : ChannelData
    plan : BlockPlan
    config : Config
    ready : Segments
        Samples outside are not read.
    reach_ns : int, optional
        How far around its blocks somebody else needs the samples.
    """

    def __init__(
        self, data, plan: BlockPlan, config: Config, ready: Segments, *, reach_ns=0
    ):
        settings = config.conditioning
        self.plan = plan
        self.window = SampleWindow(data, ready)
        self.frames = FrameSpectra(
            rate=data.rate,
            segment=plan.segment,
            hop=plan.segment // 2,
            frame_ns=round(settings.spectrum_frame_s * _NS),
            span_ns=round(settings.spectrum_span_s * _NS),
        )
        self.faults = FaultLog()
        self._work: np.ndarray | None = None
        segment_ns = round(plan.segment / plan.rate * _NS)
        reach = self.frames.span_ns + self.frames.frame_ns + segment_ns
        self.margin_ns = max(plan.pad_ns + segment_ns, reach_ns)
        self.context_ns = max(reach, self.margin_ns)

    @property
    def pieces(self) -> list[Piece]:
        """Contiguous samples in the window."""
        return self.window.pieces

    def move(self, start_ns: int, end_ns: int) -> Segments:
        """Read what blocks in ``[start_ns, end_ns)`` need; give suspicious time."""
        # behind the blocks only their own margin is kept: frames there are measured
        self.window.move(
            start_ns - self.context_ns,
            end_ns + self.context_ns,
            keep_ns=start_ns - self.margin_ns,
        )
        bad = self.faults.examine(self.pieces)
        self.frames.update(self.pieces, start_ns, end_ns, bad)
        return bad

    def whitening(self, block_ns: int) -> Whitening | None:
        """Give the filter of the block that starts at a time; None: too little data."""
        plan = self.plan
        found = self.frames.around(block_ns, block_ns + plan.block_ns)
        if found is None:
            return None
        return design_whitening(
            found,
            sample_rate=plan.rate,
            segment=plan.segment,
            half_length=plan.half_length,
            edge_hz=plan.tiles.f_low,
        )

    def part(
        self, piece: Piece, block_ns: int, whitening: Whitening
    ) -> tuple[int, tuple[np.ndarray, int, Whitening]]:
        """Give the time of a block's first sample, and what ``whiten`` takes."""
        index = piece.index_from(block_ns - self.plan.pad_ns)
        first = max(index, 0)
        samples = piece.values[first : index + self.plan.tiles.samples]
        # pieces know their start to the nanosecond; samples usually lie on rounder
        # times, and the origin must not depend on where reading began
        origin = 10 * round(piece.time_ns(index) / 10)
        return origin, (samples, first - index, whitening)

    def whiten(self, parts: list, out: np.ndarray | None = None) -> np.ndarray:
        """Give the whitened spectra of blocks, shape (n_parts, n_bins)."""
        length = self.plan.tiles.samples
        if self._work is None:
            self._work = np.empty((2 * TOGETHER, length))
        return whitened_spectra(
            parts, length, sample_rate=self.plan.rate, out=out, work=self._work
        )

    def transform(
        self, piece: Piece, block_ns: int, whitening: Whitening
    ) -> tuple[int, np.ndarray]:
        """Give the time of the transform's first sample, and the whitened spectrum."""
        origin, part = self.part(piece, block_ns, whitening)
        return origin, self.whiten([part])[0]
