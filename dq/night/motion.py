"""Slow motion in the night: levels and speeds of one channel, and their tables.

A channel's batches hand their samples over as they pass (:meth:`MotionRun.take`);
levels are kept for cells of a fixed GPS grid. After the last batch the neighbourhood of
the range is read as far as the running median reaches, so that a second's result does
not depend on the range that was asked for.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from fractions import Fraction

import numpy as np
import pandas as pd

from dq.motion import (
    BandPlan,
    Cells,
    active_rows,
    band_rms,
    block_reference,
    fringe_rows,
    plan_bands,
    speed_extremes,
)
from dq.motion.activity import LEAST_PERIODS, REFERENCE_BLOCK_S, REFERENCE_SIDE
from dq.motion.filters import Halvings
from dq.motion.fringe import FRINGE_CELL_S, speed_reach
from dq.night.motion_plan import MotionPlan, fringe_name, rms_name
from dq.night.stream import Piece, SampleWindow
from dq.segments import Segments
from dq.tables import TRANSIENTS, conform

_NS = 1_000_000_000

#: Fewest cells whose median velocity is taken for a sensor's offset: half a minute.
_LEAST_OFFSET_CELLS = 240


@dataclass(frozen=True)
class Derived:
    """One derived channel.

    Attributes
    ----------
    sample_rate : float
        Levels per second.
    f_low_hz, f_high_hz : float
    transients : pandas.DataFrame
        ``dq.tables.TRANSIENTS``.
    analysed : Segments
        Time with a level and a reference for it.
    """

    sample_rate: float
    f_low_hz: float
    f_high_hz: float
    transients: pd.DataFrame
    analysed: Segments


@dataclass
class _Track:
    """Cells as they come; each entry is a column."""

    cell_s: float
    number: list[np.ndarray] = field(default_factory=list)
    columns: list[tuple[np.ndarray, ...]] = field(default_factory=list)

    def add(self, first: int, low: int, high: int, *columns: np.ndarray) -> None:
        """Keep the cells ``low <= number < high`` of columns that start at first."""
        begin, end = max(low - first, 0), min(high - first, len(columns[0]))
        if end > begin:
            self.number.append(np.arange(first + begin, first + end))
            # half the memory; the levels' own scatter is many times larger
            self.columns.append(tuple(c[begin:end].astype(np.float32) for c in columns))

    def gathered(self, columns: int) -> tuple[np.ndarray, ...]:
        """Give numbers and columns in order of time."""
        if not self.number:
            return (np.zeros(0, np.int64), *(np.zeros(0) for _ in range(columns)))
        number = np.concatenate(self.number)
        joined = [np.concatenate([c[k] for c in self.columns]) for k in range(columns)]
        if np.any(np.diff(number) < 0):
            order = np.argsort(number, kind="stable")
            number, joined = number[order], [c[order] for c in joined]
        return (number, *joined)


class MotionRun:
    """Levels of one channel, batch by batch.

    Parameters
    ----------
    plan : MotionPlan
    rate : Fraction
        Hz.
    batch_ns : int
        Batches start at GPS multiples of this.
    """

    def __init__(self, plan: MotionPlan, rate: Fraction, batch_ns: int):
        self.plan = plan
        self.rate = Fraction(rate)
        self.batch_ns = batch_ns
        # highest first, as the halvings go
        self.bands: list[BandPlan] = plan_bands(list(plan.bands)[::-1], float(rate))
        self._levels = [_Track(band.cell_s) for band in self.bands]
        self._speed = _Track(FRINGE_CELL_S)
        self._done: set[int] = set()
        reach = [band.reach_s for band in self.bands]
        if plan.source:
            reach.append(speed_reach(float(rate)))
        longest = max((band.cell_s for band in self.bands), default=1.0)
        #: Samples this far around a batch touch its cells.
        self.reach_ns = round((max(reach, default=0.0) + longest) * _NS)

    def take(self, pieces: list[Piece], batch: int) -> None:
        """Measure the cells that start in a batch.

        Parameters
        ----------
        pieces : list of Piece
            Contiguous samples; they should reach ``reach_ns`` beyond the batch where
            samples exist.
        batch : int
            The batch starts at ``batch * batch_ns``.
        """
        if batch in self._done:
            return
        self._done.add(batch)
        start, end = batch * self.batch_ns, (batch + 1) * self.batch_ns
        for piece in pieces:
            # exactly what counts, so that sums do not depend on what else was read
            first = max(piece.index_from(start - self.reach_ns), 0)
            stop = min(piece.index_from(end + self.reach_ns), len(piece))
            if stop <= first:
                continue
            at = Fraction(piece.start_ns) * self.rate / _NS
            stretch = Halvings(piece.values[first:stop], round(at) + first)
            self._measure(stretch, start, end)

    def _measure(self, stretch: Halvings, start_ns: int, end_ns: int) -> None:
        rate = float(self.rate)
        for band, track in zip(self.bands, self._levels, strict=True):
            first, level = band_rms(stretch, band, rate)
            low, high = _cells_in(start_ns, end_ns, band.cell_s)
            track.add(first, low, high, level)
        if self.plan.source:
            first, slowest, fastest = speed_extremes(stretch, self.plan.source, rate)
            low, high = _cells_in(start_ns, end_ns, FRINGE_CELL_S)
            self._speed.add(first, low, high, slowest, fastest)

    def read_around(self, data, ready: Segments, span: Segments) -> None:
        """Read what lies beyond the batches and yet counts for the running medians."""
        if not span:
            return
        block = round(REFERENCE_BLOCK_S * _NS)
        low = (int(span.starts[0]) // block - REFERENCE_SIDE) * block
        high = (int(span.ends[-1]) // block + 1 + REFERENCE_SIDE) * block
        wanted: set[int] = set()
        for start, end in ready.clip(low, high):
            wanted.update(range(start // self.batch_ns, -(-end // self.batch_ns)))
        window = SampleWindow(data, ready)
        for batch in sorted(wanted - self._done):
            start = batch * self.batch_ns
            end = start + self.batch_ns
            window.move(start - self.reach_ns, end + self.reach_ns)
            self.take(window.pieces, batch)

    def derived(self, channel: str, wanted: Segments) -> dict[str, Derived]:
        """Give the derived channels in the wanted time.

        Parameters
        ----------
        channel : str
        wanted : Segments
            Cells that do not lie in it as a whole are left out.
        """
        out = {}
        for band, track in zip(self.bands, self._levels, strict=True):
            name = rms_name(channel, band.low_hz, band.high_hz)
            out[name] = self._level_table(band, track, wanted)
        if self.plan.source:
            cells = self._speed_cells(wanted)
            for passes in self.plan.passes:
                out[fringe_name(channel, passes)] = self._fringe(cells, passes)
        return out

    def _level_table(self, band: BandPlan, track: _Track, wanted) -> Derived:
        number, level = track.gathered(1)
        cells = Cells(number, level, band.cell_s)
        least = int(np.ceil(LEAST_PERIODS / (band.low_hz * band.cell_s)))
        reference = block_reference(cells, least=least)
        # a median of 0 is a sensor at rest: no level can be told from it
        known = (reference > 0) & _inside(number, band.cell_s, wanted)
        cells, reference = cells.take(known), reference[known]
        table = active_rows(
            Cells(cells.number, cells.level / reference, band.cell_s),
            amplitude=cells.level,
            ladder=list(self.plan.rms_ladder),
        )
        centre = float(np.sqrt(band.low_hz * band.high_hz))
        table = table.drop(columns="lowest").assign(
            frequency_hz=centre,
            f_low_hz=band.low_hz,
            f_high_hz=band.high_hz,
            q=centre / (band.high_hz - band.low_hz),
        )
        return Derived(
            sample_rate=1.0 / band.cell_s,
            f_low_hz=band.low_hz,
            f_high_hz=band.high_hz,
            transients=_conformed(table),
            analysed=_time_of(cells),
        )

    def _speed_cells(self, wanted: Segments) -> Cells:
        number, low, high = self._speed.gathered(2)
        middle = Cells(number, 0.5 * (low + high), FRINGE_CELL_S)
        offset = block_reference(middle, least=_LEAST_OFFSET_CELLS)
        speed = np.maximum(np.abs(low - offset), np.abs(high - offset))
        cells = Cells(number, speed, FRINGE_CELL_S)
        return cells.take(np.isfinite(speed) & _inside(number, FRINGE_CELL_S, wanted))

    def _fringe(self, cells: Cells, passes: int) -> Derived:
        plan = self.plan
        table = fringe_rows(
            cells,
            passes=passes,
            edge_hz=plan.edge_hz,
            ladder=list(plan.fringe_ladder),
            wavelength_m=plan.wavelength_m,
        )
        top = float(table["frequency_hz"].max()) if len(table) else plan.edge_hz
        return Derived(
            sample_rate=1.0 / FRINGE_CELL_S,
            f_low_hz=plan.edge_hz,
            f_high_hz=round(top, 4),
            transients=_conformed(table),
            analysed=_time_of(cells),
        )


def _cells_in(start_ns: int, end_ns: int, cell_s: float) -> tuple[int, int]:
    """Give the first cell that starts in a range and the first one after it."""
    cell = Fraction(cell_s) * _NS
    return -(-start_ns // cell), -(-end_ns // cell)


def _inside(number: np.ndarray, cell_s: float, time: Segments) -> np.ndarray:
    """Say which cells lie in some time as a whole."""
    inside = np.zeros(len(number), dtype=bool)
    cell = Fraction(cell_s) * _NS
    for start, end in time:
        low, high = np.searchsorted(number, [-(-start // cell), end // cell])
        inside[low:high] = True
    return inside


def _time_of(cells: Cells) -> Segments:
    number = cells.number
    if len(number) == 0:
        return Segments.none()
    last = np.append(np.flatnonzero(np.diff(number) != 1), len(number) - 1)
    first = np.append(0, last[:-1] + 1)
    return Segments.from_arrays(
        _start_ns(number[first], cells.cell_s),
        _start_ns(number[last] + 1, cells.cell_s),
    )


def _start_ns(number: np.ndarray, cell_s: float) -> np.ndarray:
    # whole microseconds, as the tables have them
    return np.round(number * cell_s * 1e6).astype(np.int64) * 1000


def _conformed(table: pd.DataFrame) -> pd.DataFrame:
    for name in ("gps_time", "gps_start", "gps_end", "snr"):
        table[name] = table[name].round(6)
    return conform(table, TRANSIENTS)
