"""Features of transients from their channel's data, block by block.

The same blocks, spectra and whitening as in the search, on the same GPS grid, so that a
transient's features do not depend on the range that was asked for; only batches that
hold a transient are read.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import pandas as pd
import scipy.fft

from dq.conditioning.faults import equal_runs
from dq.config import Config
from dq.features import NAMES, Snippet, cut_snippet, measure
from dq.night.blocks import default_low_edge, plan_blocks
from dq.night.whitened import WhitenedBlocks
from dq.segments import Segments, to_ns_array

_NS = 1_000_000_000

#: Samples of snippets that are kept before they are measured (16 MiB of float32).
_KEPT_SAMPLES = 2**22

#: A peak needs this much settled data on both sides, s: less shows no shape.
_LEAST_S = 0.1

NOT_READY = "outside the recorded ready time"
NO_SPECTRUM = "too little data around for a noise spectrum"
NOT_SETTLED = "within the whitening filter's settling time of an end of the data"


@dataclass(frozen=True)
class FeatureTable:
    """Features of some transients.

    Attributes
    ----------
    table : pandas.DataFrame
        Columns ``dq.features.FEATURES``, one row per transient in its order; NaN
        throughout where a transient could not be measured.
    left_out : dict of int to str
        Position of each transient without features, and the reason.
    """

    table: pd.DataFrame
    left_out: dict[int, str] = field(default_factory=dict)


class FeaturePass:
    """Snippets wait here until there are enough to be measured together."""

    def __init__(self, transients: pd.DataFrame, among, config: Config, f_low: float):
        self.transients = transients
        self.options = {
            "among": transients if among is None else among,
            "mains_hz": config.site.mains_hz,
            "f_low_hz": f_low,
        }
        self.values = np.full((len(transients), len(NAMES)), np.nan)
        self.waiting: dict[int, Snippet] = {}
        self.samples = 0

    def see(self, cutter: BlockCutter) -> None:
        """Look at a block before its transients are cut; nothing to see here."""

    def add(self, position: int, snippet: Snippet) -> None:
        """Take a transient's snippet."""
        self.waiting[position] = snippet
        self.samples += len(snippet.values)
        if self.samples >= _KEPT_SAMPLES:
            self.flush()

    def flush(self) -> None:
        """Measure what waits."""
        at = sorted(self.waiting)
        if at:
            rows = self.transients.iloc[at]
            found = measure([self.waiting[i] for i in at], rows, **self.options)
            self.values[at] = found.to_numpy()
        self.waiting, self.samples = {}, 0


def measure_transients(
    data,
    transients: pd.DataFrame,
    *,
    ready: Segments | None,
    config: Config,
    f_low_hz: float | None = None,
    f_high_hz: float | None = None,
    among: pd.DataFrame | None = None,
    progress=None,
) -> FeatureTable:
    """Measure the features of one channel's transients.

    Parameters
    ----------
    data : dq.store.ChannelData
    transients : pandas.DataFrame
        Columns of ``dq.tables.TRANSIENTS``, in any order and from any time.
    ready : Segments or None
        Ready time; None means all recorded time.
    config : Config
    f_low_hz, f_high_hz : float, optional
        The channel's own band; the configuration's otherwise.
    among : pandas.DataFrame, optional
        All transients of the channel, whose neighbourhood is counted; by default
        ``transients`` themselves.
    progress : callable, optional
        Called with the fraction done.

    Returns
    -------
    FeatureTable

    Raises
    ------
    ChannelError
        The samples cannot be used.
    PlanError
        The band does not fit the channel's rate.
    """
    work = FeaturePass(transients, among, config, low_edge(data, config, f_low_hz))
    band = {"f_low_hz": f_low_hz, "f_high_hz": f_high_hz}
    left_out = walk(data, work, ready=ready, config=config, progress=progress, **band)
    table = pd.DataFrame(work.values, columns=list(NAMES), index=transients.index)
    return FeatureTable(table, left_out)


def low_edge(data, config: Config, f_low_hz: float | None) -> float:
    """Give the lower edge of the band that is searched, Hz."""
    return f_low_hz or config.tiles.f_low_hz or default_low_edge(float(data.rate))


def walk(
    data,
    work: FeaturePass,
    *,
    ready: Segments | None,
    config: Config,
    f_low_hz: float | None = None,
    f_high_hz: float | None = None,
    progress=None,
) -> dict[int, str]:
    """Go over the blocks that hold transients; give those that cannot be cut."""
    f_low = low_edge(data, config, f_low_hz)
    plan = plan_blocks(data.rate, config, f_low, f_high_hz or config.tiles.f_high_hz)
    ready = data.recorded if ready is None else ready & data.recorded
    blocks = WhitenedBlocks(data, plan, config, ready)
    times = to_ns_array(work.transients["gps_time"].to_numpy(float))
    block = times // plan.block_ns
    left_out = {}
    inside = ready.contains(times)
    step = plan.step_ns // plan.block_ns
    steps = np.unique(block[inside] // step)
    for number, at in enumerate(steps):
        start = int(at) * plan.step_ns
        blocks.move(start, start + plan.step_ns)
        for index in np.unique(block[inside & (block // step == at)]):
            here = np.flatnonzero(inside & (block == index))
            left_out |= _block(blocks, int(index), here, times, work)
        if progress:
            progress((number + 1) / len(steps))
    work.flush()
    left_out |= {int(i): NOT_READY for i in np.flatnonzero(~inside)}
    return dict(sorted(left_out.items()))


def _block(blocks: WhitenedBlocks, index: int, here, times, work) -> dict[int, str]:
    """Cut the snippets of one block's transients; give those left out."""
    block_ns = index * blocks.plan.block_ns
    whitening = blocks.whitening(block_ns)
    if whitening is None:
        return {int(i): NO_SPECTRUM for i in here}
    # not finite samples part a ready stretch into pieces
    left = {int(i): NOT_READY for i in here}
    for piece in blocks.pieces:
        mine = [i for i in here if piece.start_ns <= times[i] < piece.end_ns]
        if not mine:
            continue
        left = {i: reason for i, reason in left.items() if i not in mine}
        cutter = BlockCutter(blocks, piece, block_ns, whitening)
        work.see(cutter)
        for i in mine:
            snippet = cutter.cut(work.transients.iloc[i], int(times[i]))
            if snippet is None:
                left[int(i)] = NOT_SETTLED
            else:
                work.add(int(i), snippet)
    return left


class BlockCutter:
    """One block of one piece as a whitened series."""

    def __init__(self, blocks: WhitenedBlocks, piece, block_ns: int, whitening):
        plan = blocks.plan
        samples = plan.tiles.samples
        self.rate = plan.rate
        self.whitening = whitening
        self.origin_ns, spectrum = blocks.transform(piece, block_ns, whitening)
        series = scipy.fft.irfft(spectrum, n=samples, workers=1)
        series *= np.float32(np.sqrt(samples))
        self.series = series
        # the filter reaches half_length to each side, the difference one sample more
        settling = (plan.half_length + 2) / plan.rate
        first = max((piece.start_ns - self.origin_ns) / _NS, 0.0)
        last = min((piece.end_ns - self.origin_ns) / _NS, samples / plan.rate)
        self.settled = first + settling, last - settling
        low = max(piece.index_from(self.origin_ns), 0)
        runs = equal_runs(piece.values[low : low + samples])
        shift = (piece.time_ns(low) - self.origin_ns) / _NS
        self.flat_start = shift + runs.first / plan.rate
        self.flat_end = self.flat_start + runs.length / plan.rate

    def cut(self, row, time_ns: int) -> Snippet | None:
        """Cut one transient; None when its peak is not settled."""
        peak = (time_ns - self.origin_ns) / _NS
        if not self.settled[0] + _LEAST_S <= peak <= self.settled[1] - _LEAST_S:
            return None
        start = peak - (row["gps_time"] - row["gps_start"])
        end = peak + (row["gps_end"] - row["gps_time"])
        flat = np.minimum(self.flat_end, end) - np.maximum(self.flat_start, start)
        return cut_snippet(
            self.series,
            sample_rate=self.rate,
            settled_s=self.settled,
            peak_s=peak,
            start_s=float(start),
            end_s=float(end),
            f_low_hz=float(row["f_low_hz"]),
            f_high_hz=float(row["f_high_hz"]),
            frequency=self.whitening.frequency,
            density=self.whitening.density,
            flat_s=float(np.maximum(flat, 0.0).sum()),
        )
