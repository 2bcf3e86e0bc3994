"""Whitened blocks of one channel: what tiles and features both start from.

Data come through a window that moves forward; a block's spectrum rests on the frames
around it, and its transform reaches ``pad`` beyond both ends (``night.blocks``).
"""

from __future__ import annotations

import numpy as np

from dq.conditioning.whiten import Whitening, design_whitening, whitened_spectrum
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
    """

    def __init__(self, data, plan: BlockPlan, config: Config, ready: Segments):
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
        segment_ns = round(plan.segment / plan.rate * _NS)
        reach = self.frames.span_ns + self.frames.frame_ns + segment_ns
        self.context_ns = max(reach, plan.pad_ns + segment_ns)

    @property
    def pieces(self) -> list[Piece]:
        """Contiguous samples in the window."""
        return self.window.pieces

    def move(self, start_ns: int, end_ns: int) -> Segments:
        """Read what blocks in ``[start_ns, end_ns)`` need; give suspicious time."""
        self.window.move(start_ns - self.context_ns, end_ns + self.context_ns)
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

    def transform(
        self, piece: Piece, block_ns: int, whitening: Whitening
    ) -> tuple[int, np.ndarray]:
        """Give the time of the transform's first sample, and the whitened spectrum."""
        plan, samples = self.plan, self.plan.tiles.samples
        index = piece.index_from(block_ns - plan.pad_ns)
        first = max(index, 0)
        spectrum = whitened_spectrum(
            piece.values[first : index + samples],
            first - index,
            samples,
            whitening,
            sample_rate=plan.rate,
        )
        # pieces know their start to the nanosecond; samples usually lie on rounder
        # times, and the origin must not depend on where reading began
        return 10 * round(piece.time_ns(index) / 10), spectrum
