"""Blocks, padding and tiles of one channel: all that does not depend on its data."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from dq.conditioning.whiten import TOGETHER, difference_response
from dq.config import Config
from dq.tiles import TilePlan, band_weights, plan_tiles
from dq.tiles.plan import band_rows, settling_s

_NS = 1_000_000_000

#: Blocks that go through the tiling together: the FFT library works on several side by
#: side (measured: 8 run four times as fast as one at a time), and slow channels share
#: the cost of a row's calls among more. Samples per batch, and bounds on the blocks.
BATCH_SAMPLES = 2**21
BATCH_BLOCKS = (8, 32)

#: Samples of a batch, its padding included, from which on the window moves in pairs of
#: blocks (64 MiB of double precision; own choice).
STEP_SAMPLES = 2**22

#: Longest settling time of tile and filter at the ends of data, s. Longer tiles are
#: left out of the plan: they would cost more unjudged time than they find (own choice).
MAX_SETTLING_S = 8.0


def default_low_edge(sample_rate: float) -> float:
    """Give the lower edge of the band where nobody chose one, Hz."""
    return min(max(sample_rate / 50.0, 1.0), 10.0)


@dataclass(frozen=True)
class BlockPlan:
    """Everything about the blocks of one channel that does not depend on its data."""

    rate: float
    block_ns: int
    batch: int
    pad_ns: int
    segment: int
    half_length: int
    tiles: TilePlan
    weights: object
    difference: np.ndarray

    @property
    def batch_ns(self) -> int:
        """Length of a batch of blocks."""
        return self.batch * self.block_ns

    @property
    def step_ns(self) -> int:
        """How far the window over the samples moves at a time.

        All of a batch at once, but pairs of blocks where samples are many: the window
        holds the spectrum's reach on top.
        """
        if self.batch * self.tiles.samples <= STEP_SAMPLES:
            return self.batch_ns
        return TOGETHER * self.block_ns


def plan_blocks(rate, config: Config, f_low: float, f_high: float | None) -> BlockPlan:
    """Plan block, padding and tiles for a sample rate.

    Raises
    ------
    PlanError
        The band does not fit the rate.
    """
    from scipy.fft import next_fast_len

    settings, tiles = config.conditioning, config.tiles
    fs = float(rate)
    segment = 2 * max(round(settings.spectrum_segment_s * fs / 2), 8)
    half = round(settings.whitening_half_length_s * fs)
    half = min(max(half, 4), segment // 2)
    limit = MAX_SETTLING_S - half / fs
    options = {
        "f_low": f_low,
        "f_high": f_high,
        "q_min": tiles.q_min,
        "q_max": tiles.q_max,
        "mismatch": tiles.mismatch,
        "max_settling_s": limit,
    }
    q, frequency, _ = band_rows(fs, **options)
    pad = math.ceil(4 * (half / fs + settling_s(q, frequency) + 2 / fs)) / 4
    for step in range(17):
        samples = round((tiles.block_s + 2 * (pad + step / 4)) * fs)
        if next_fast_len(samples, real=True) == samples:
            pad += step / 4
            break
    samples = round((tiles.block_s + 2 * pad) * fs)
    plan = plan_tiles(fs, samples, **options)
    frequency = np.arange(segment // 2 + 1) * (fs / segment)
    return BlockPlan(
        rate=fs,
        block_ns=round(tiles.block_s * _NS),
        batch=_batch_blocks(tiles.block_s * fs),
        pad_ns=round(pad * _NS),
        segment=segment,
        half_length=half,
        tiles=plan,
        weights=band_weights(plan, frequency),
        difference=difference_response(frequency, fs),
    )


def _batch_blocks(samples: float) -> int:
    """Give how many blocks of ``samples`` go together, a power of two."""
    blocks = 2 ** round(math.log2(BATCH_SAMPLES / samples))
    return int(min(max(blocks, BATCH_BLOCKS[0]), BATCH_BLOCKS[1]))
