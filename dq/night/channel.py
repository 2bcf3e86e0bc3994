"""One channel's night: samples in, transients and accounted time out.

Blocks start at GPS multiples of ``block_s`` and each second belongs to one block. A
block's transform reaches ``pad`` beyond both its ends: the whitening filter and the
longest tile settle there. Where the data themselves end, the same time is cut off and
accounted for as unjudged. Blocks go through the tiling several at a time.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from dq.config import Config
from dq.errors import ChannelError, NoDataError
from dq.night.blocks import (
    MAX_SETTLING_S,
    BlockPlan,
    default_low_edge,
    plan_blocks,
)
from dq.night.motion import Derived, MotionRun
from dq.night.motion_plan import MotionPlan
from dq.night.whitened import WhitenedBlocks
from dq.segments import Segments
from dq.tables import TRANSIENTS, conform
from dq.transients import (
    LINK,
    Marks,
    Transforms,
    equivalent_energy,
    label_marks,
    label_transients,
    search_tiles,
    split_finished,
    summarise,
)

_NS = 1_000_000_000

#: Runs carried over from batch to batch before clusters are cut at the batch's end, so
#: that a channel which never falls below threshold cannot fill the memory.
MAX_PENDING = 300_000


@dataclass(frozen=True)
class ChannelResult:
    """What a channel's analysis found; all segments lie in the requested range.

    Attributes
    ----------
    channel : str
    sample_rate : float
        Hz.
    f_low_hz, f_high_hz : float
        Lowest and highest tile frequency that was searched.
    transients : pandas.DataFrame
        Columns of ``dq.tables.TRANSIENTS``, sorted by time.
    analysed, missing, unjudged : Segments
        Judged time; wanted but not recorded or not finite; recorded and wanted, but
        within the settling time of an end or without enough data for a spectrum.
    faults : dict of str to Segments
        ``saturation``, ``flat_line``, ``dropout``, ``not_finite``.
    notes : list of str
        What a reader should know, one line each.
    derived : dict of str to Derived
        Slow and derived witnesses by name.
    """

    channel: str
    sample_rate: float
    f_low_hz: float
    f_high_hz: float
    transients: pd.DataFrame
    analysed: Segments
    missing: Segments
    unjudged: Segments
    faults: dict[str, Segments]
    notes: list[str] = field(default_factory=list)
    derived: dict[str, Derived] = field(default_factory=dict)


@dataclass
class _Item:
    """One transform: the samples around one block, and the time it judges."""

    low_ns: int
    high_ns: int
    origin_ns: int
    level: np.ndarray
    noise: np.ndarray


class _ChannelRun:
    """The batch loop over one channel; see :func:`analyse_channel`."""

    def __init__(self, data, plan: BlockPlan, config: Config, ready, wanted, motion):
        self.plan = plan
        self.wanted = wanted
        self.q_range = (config.tiles.q_min, config.tiles.q_max)
        self.threshold = 1.0 + 0.5 * config.transients.snr_threshold**2
        self.motion = MotionRun(motion, data.rate, plan.step_ns) if motion else None
        reach_ns = self.motion.reach_ns if self.motion else 0
        self.blocks = WhitenedBlocks(data, plan, config, ready, reach_ns=reach_ns)
        self.faults = self.blocks.faults
        self.finite: list[tuple[int, int]] = []
        self.analysed: list[tuple[int, int]] = []
        self.tables: list[dict] = []
        self.pending = Marks.none()
        self.cut = False
        bins = plan.tiles.samples // 2 + 1
        # one for all batches: fresh memory costs page faults
        self.spectra = np.empty((plan.batch, bins), dtype=np.complex64)

    def batch(self, start_ns: int, *, last: bool) -> None:
        """Analyse the blocks of the batch that starts at ``start_ns``."""
        plan = self.plan
        items: list[_Item] = []
        parts = [self.pending]
        for low in range(start_ns, start_ns + plan.batch_ns, plan.step_ns):
            self.blocks.move(low, low + plan.step_ns)
            if self.motion:
                self.motion.take(self.blocks.pieces, low // plan.step_ns)
            self.finite += [(p.start_ns, p.end_ns) for p in self.blocks.pieces]
            waiting = self._items(low, low + plan.step_ns)
            while waiting:
                room = plan.batch - len(items)
                if room == 0:
                    parts.append(self._marks(items, start_ns))
                    items, room = [], plan.batch
                now, waiting = waiting[:room], waiting[room:]
                out = self.spectra[len(items) : len(items) + len(now)]
                self.blocks.whiten([part for _, part in now], out)
                items += [item for item, _ in now]
        if items:
            parts.append(self._marks(items, start_ns))
        self._collect(Marks.join(parts), start_ns, last=last)

    def _items(self, start_ns: int, end_ns: int) -> list[tuple]:
        """Give the items of some blocks, each with what ``whiten`` takes.

        The samples stay apart from the items: they would keep the window's memory.
        """
        items = []
        for block_ns in range(start_ns, end_ns, self.plan.block_ns):
            items += self._items_of_block(block_ns)
        return items

    def _items_of_block(self, block_ns: int) -> list[tuple]:
        plan, items = self.plan, []
        whitening = None
        for piece in self.blocks.pieces:
            low = max(block_ns, piece.start_ns + plan.pad_ns)
            high = min(block_ns + plan.block_ns, piece.end_ns - plan.pad_ns)
            for begin, end in self.wanted.clip(low, max(high, low)):
                if whitening is None:
                    whitening = self.blocks.whitening(block_ns)
                if whitening is None:
                    return []
                items.append(self._item(piece, block_ns, begin, end, whitening))
        return items

    def _item(self, piece, block_ns, begin, end, whitening) -> tuple:
        weights = self.plan.weights
        origin, part = self.blocks.part(piece, block_ns, whitening)
        level = weights @ whitening.density
        noise = 1.0 / (weights @ whitening.gain)
        self.analysed.append((begin, end))
        return _Item(begin, end, origin, level, noise), part

    def _marks(self, items: list[_Item], reference_ns: int) -> Marks:
        tiles = self.plan.tiles
        spectra = self.spectra[: len(items)]
        level = np.stack([i.level for i in items])
        origin = np.array([i.origin_ns for i in items])
        low = np.array([i.low_ns for i in items]) - origin
        high = np.array([i.high_ns for i in items]) - origin
        transforms = Transforms(
            spectra=spectra,
            level=level,
            noise=np.stack([i.noise for i in items]),
            origin_s=(origin - reference_ns) / _NS,
            low_s=low / _NS,
            high_s=high / _NS,
        )
        return search_tiles(
            transforms, tiles, threshold=self.threshold, q_range=self.q_range
        )

    def _collect(self, marks: Marks, start_ns: int, *, last: bool) -> None:
        groups = label_marks(marks)
        batch_s = self.plan.batch_ns / _NS
        reach = 2.0 * LINK * self.plan.tiles.longest_half_extent_s
        finished, pending = split_finished(marks, groups, batch_s - reach)
        if last or np.count_nonzero(pending) > MAX_PENDING:
            self.cut |= not last
            finished, pending = finished | pending, pending & False
        labels = label_transients(marks, groups)
        table = self._reported(summarise(marks.take(finished), labels[finished]))
        for name in ("time", "start", "end"):
            table[name] = np.round(table[name], 6) + start_ns / _NS
        self.tables.append(table)
        self.pending = marks.take(pending).shift(-batch_s)

    def _reported(self, found: dict) -> dict:
        """Give the clusters that are transients, by a tile or by their tiles' sum."""
        rare = equivalent_energy(found["score"])
        found["cluster_snr"] = np.sqrt(2.0 * np.maximum(rare - 1.0, 0.0))
        found["summed_snr"] = np.sqrt(2.0 * found["summed"])
        kept = found["loud"].astype(bool) | (rare >= self.threshold)
        return {name: values[kept] for name, values in found.items()}

    def table(self) -> pd.DataFrame:
        """Give all transients so far as one table."""
        names = ("time", "start", "end", "frequency", "low", "high", "q", "snr")
        names = (*names, "amplitude", "count", "summed_snr", "cluster_snr")
        columns = [c.name for c in TRANSIENTS]
        data = {
            column: np.concatenate([t[name] for t in self.tables])
            if self.tables
            else np.zeros(0)
            for column, name in zip(columns, names, strict=True)
        }
        frame = conform(pd.DataFrame(data), TRANSIENTS)
        frame = frame.sort_values(["gps_time", "frequency_hz"], kind="stable")
        return frame.reset_index(drop=True)


def analyse_channel(
    data,
    *,
    ready: Segments | None,
    start_ns: int,
    end_ns: int,
    config: Config,
    f_low_hz: float | None = None,
    f_high_hz: float | None = None,
    motion: MotionPlan | None = None,
    progress=None,
) -> ChannelResult:
    """Find the transients of one channel in ``[start_ns, end_ns)``.

    Parameters
    ----------
    data : dq.store.ChannelData
    ready : Segments or None
        Ready time; None means all recorded time. Data outside are not read, data
        beyond the requested range are, where they exist, so that the result of a
        second does not depend on the range that was asked for.
    start_ns, end_ns : int
        GPS nanoseconds.
    config : Config
    f_low_hz, f_high_hz : float, optional
        The channel's own band; the configuration's otherwise.
    motion : MotionPlan, optional
        What is derived from the channel besides; nothing by default.
    progress : callable, optional
        Called with the fraction done, after each batch.

    Returns
    -------
    ChannelResult

    Raises
    ------
    ChannelError
        The samples cannot be used (constant, or the reader refused them).
    PlanError
        The band does not fit the channel's rate.
    NoDataError
        Nothing is recorded in the wanted time.
    """
    span = Segments.of([(start_ns, end_ns)])
    recorded = data.recorded
    ready = recorded if ready is None else ready
    wanted = ready & span
    if not wanted & recorded:
        raise NoDataError(
            f"channel {data.name!r} has no recorded data in the wanted "
            f"{wanted.total_s:g} s; check the files and the ready segments"
        )
    tiles = config.tiles
    f_low = f_low_hz or tiles.f_low_hz or default_low_edge(float(data.rate))
    plan = plan_blocks(data.rate, config, f_low, f_high_hz or tiles.f_high_hz)
    run = _ChannelRun(data, plan, config, ready & recorded, wanted, motion)
    batches = _batches(wanted & recorded, plan.batch_ns)
    for number, index in enumerate(batches):
        follows = number + 1 < len(batches) and batches[number + 1] == index + 1
        run.batch(index * plan.batch_ns, last=not follows)
        if progress:
            progress((number + 1) / len(batches))
    if run.faults.lowest == run.faults.highest:
        raise ChannelError(
            f"channel {data.name!r} is constant at {run.faults.lowest:g} "
            "throughout; it is dead or not connected"
        )
    if run.motion:
        run.motion.read_around(data, ready & recorded, wanted & recorded)
    return _result(data, run, plan, wanted, recorded, f_low)


def _batches(time: Segments, batch_ns: int) -> list[int]:
    numbers: set[int] = set()
    for start, end in time:
        numbers.update(range(start // batch_ns, -(-end // batch_ns)))
    return sorted(numbers)


def _result(data, run: _ChannelRun, plan, wanted, recorded, f_low) -> ChannelResult:
    finite = Segments.of(run.finite) & wanted
    analysed = Segments.of(run.analysed)
    faults = run.faults.segments(wanted)
    faults["not_finite"] = (recorded & wanted) - finite
    frequency = plan.tiles.frequency
    notes = []
    lowest = float(frequency.min())
    if lowest > 1.5 * f_low:
        notes.append(
            f"searched from {lowest:.3g} Hz, not {f_low:g} Hz: lower tiles would need "
            f"more than {MAX_SETTLING_S:g} s to settle"
        )
    if run.cut:
        notes.append("transients longer than a batch of blocks were cut at its end")
    derived = {}
    if run.motion:
        notes += run.motion.plan.notes
        derived = run.motion.derived(data.name, wanted)
    return ChannelResult(
        channel=data.name,
        sample_rate=float(data.rate),
        f_low_hz=lowest,
        f_high_hz=float(frequency.max()),
        transients=run.table(),
        analysed=analysed,
        missing=wanted - finite,
        unjudged=finite - analysed,
        faults=faults,
        notes=notes,
        derived=derived,
    )
