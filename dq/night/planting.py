"""Signals planted into the strain's samples, searched for and sorted as any transient.

Runs of time are spread over the night. In each, one signal comes every ``SPACING_S``;
it is added to the samples as they are read, in memory, and the finder goes over the run
as it did in the night. What it finds at a signal's time, and into which family that is
sorted, tells what a veto of a family of the strain takes away from a search.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import pandas as pd

from dq.config import Config
from dq.night.channel import ChannelResult, analyse_channel
from dq.night.signals import Signal, draw_signal, optimal_snr
from dq.segments import NS, Segments, to_ns_array
from dq.store import ChannelData, Series
from dq.tables import PLANTED, conform

#: A signal every so many seconds: the spectrum of a block, a median over time, does not
#: notice so few.
SPACING_S = 32.0

#: Signals in one run; more runs cover more of the night, fewer cost less reading.
RUN_SIGNALS = 8

#: A transient within this of a burst, or of a chirp's end, is the signal, s.
NEAR_S = 0.25

#: Noise on each side that a signal's strength is set by, s: a hundred periodograms of
#: a second leave the strength within a percent.
_NOISE_S = 32.0

#: Sorts a run's transients: (transients, data with the signals) -> families.
Sorter = Callable[[pd.DataFrame, "PlantedData"], "list[str]"]


class PlantedData:
    """A channel with signals added to its samples as they are read.

    Parameters
    ----------
    data : dq.store.ChannelData
    signals : list of (Signal, float)
        With the factor of each waveform.
    """

    def __init__(self, data: ChannelData, signals: list[tuple[Signal, float]]):
        self._data = data
        self._signals = signals
        self.name, self.rate = data.name, data.rate
        self.recorded, self.unit = data.recorded, data.unit
        self.problems, self.read_problems = data.problems, data.read_problems

    def read(self, start_ns: int, end_ns: int) -> list[Series]:
        """Give the samples of a range, signals included."""
        return [self._with_signals(s) for s in self._data.read(start_ns, end_ns)]

    def _with_signals(self, series: Series) -> Series:
        values = series.values.astype(np.float64)
        for signal, factor in self._signals:
            low, high = _reach(signal)
            first = max(series.index_at_or_after(low), 0)
            stop = min(series.index_at_or_after(high), len(values))
            if first < stop:
                values[first:stop] += factor * signal.waveform(
                    _times(series, first, stop, signal.time_ns)
                )
        return Series(series.start_ns, series.rate, values)


def _reach(signal: Signal) -> tuple[int, int]:
    low = signal.time_ns - round(signal.before_s * NS)
    return low, signal.time_ns + round(signal.after_s * NS) + 1


def _times(series: Series, first: int, stop: int, origin_ns: int) -> np.ndarray:
    offset = (series.start_ns - origin_ns) / NS
    return offset + np.arange(first, stop) / float(series.rate)


@dataclass(frozen=True)
class _Run:
    start_ns: int
    end_ns: int
    times: list[int]


def plan_runs(analysed: Segments, plants: int) -> list[_Run]:
    """Spread runs of signals evenly over the analysed time.

    Parameters
    ----------
    analysed : Segments
    plants : int
        Signals wanted; short stretches may leave room for fewer.
    """
    spacing = round(SPACING_S * NS)
    chunks = []
    for low, high in analysed:
        slots = [int(low) + k * spacing for k in range((high - low) // spacing)]
        chunks += [
            slots[k : k + RUN_SIGNALS] for k in range(0, len(slots), RUN_SIGNALS)
        ]
    left = min(plants, sum(map(len, chunks)))
    count = -(-left // RUN_SIGNALS)
    while left and sum(map(len, _spread(chunks, count))) < left:
        count += 1
    runs = []
    for slots in _spread(chunks, count) if left > 0 else ():
        slots = slots[:left]
        left -= len(slots)
        if slots:
            times = [start + spacing // 2 for start in slots]
            runs.append(_Run(slots[0], slots[-1] + spacing, times))
    return runs


def _spread(chunks: list, count: int) -> list:
    """Take some of a list, evenly."""
    count = min(count, len(chunks))
    places = (np.arange(count) + 0.5) / max(count, 1) * len(chunks)
    return [chunks[int(place)] for place in places]


def plant_signals(
    data: ChannelData,
    night: ChannelResult,
    *,
    ready: Segments | None,
    config: Config,
    f_low_hz: float | None = None,
    f_high_hz: float | None = None,
    sort: Sorter | None = None,
) -> pd.DataFrame:
    """Plant signals, find them and sort them.

    Parameters
    ----------
    data : dq.store.ChannelData
        The strain.
    night : ChannelResult
        What the night found without them.
    ready, config, f_low_hz, f_high_hz
        As :func:`dq.night.channel.analyse_channel` takes them.
    sort : callable, optional
        Gives the family of each transient; without it they stay ``unsorted``.

    Returns
    -------
    pandas.DataFrame
        ``dq.tables.PLANTED``, in order of time; the same for the same night.
    """
    rows: list[dict] = []
    for run in plan_runs(night.analysed, config.vetoes.signal_loss_plants):
        seed = [run.start_ns // NS, len(run.times)]
        rng = np.random.default_rng(seed)
        signals = [_drawn(data, night, t, rng) for t in run.times]
        signals = [s for s in signals if s is not None]
        planted = PlantedData(data, signals)
        found = analyse_channel(
            planted,
            ready=ready,
            start_ns=run.start_ns,
            end_ns=run.end_ns,
            config=config,
            f_low_hz=f_low_hz,
            f_high_hz=f_high_hz,
        ).transients
        families = ["unsorted"] * len(found)
        if sort is not None:
            families = sort(found, planted)
        found = found.assign(family=families)
        rows += [_row(s, found, night.transients) for s, _ in signals]
    names = [c.name for c in PLANTED]
    return conform(pd.DataFrame(rows, columns=names), PLANTED)


def _drawn(data: ChannelData, night: ChannelResult, time_ns: int, rng):
    """Draw a signal near a time and give it with the factor for its SNR."""
    time_ns += int(rng.integers(-SPACING_S * NS // 4, SPACING_S * NS // 4))
    signal = draw_signal(time_ns, rng, low_hz=night.f_low_hz, high_hz=night.f_high_hz)
    return scaled(data, night, signal)


def scaled(data: ChannelData, night: ChannelResult, signal: Signal):
    """Give a signal with the factor for its SNR; None where too few data are near."""
    half = round(_NOISE_S * NS)
    pieces = data.read(signal.time_ns - half, signal.time_ns + half)
    if not pieces:
        return None
    noise = max(pieces, key=lambda s: len(s.values))
    rate = float(data.rate)
    low, high = _reach(signal)
    count = max(int((high - low) / NS * rate), 8)
    waveform = signal.waveform((low - signal.time_ns) / NS + np.arange(count) / rate)
    if len(noise.values) < 8 * rate:
        return None
    unit = optimal_snr(
        waveform,
        noise.values,
        sample_rate=rate,
        low_hz=night.f_low_hz,
        high_hz=night.f_high_hz,
    )
    return (signal, signal.snr / unit) if unit > 0 else None


def is_new(found: pd.DataFrame, before: pd.DataFrame) -> np.ndarray:
    """Say which transients are not among those found without the signals."""
    digits = {"gps_time": 3, "snr": 1}
    known = before[list(digits)].round(digits)
    mine = found[list(digits)].round(digits)
    return ~pd.MultiIndex.from_frame(mine).isin(pd.MultiIndex.from_frame(known))


def _row(signal: Signal, found: pd.DataFrame, before: pd.DataFrame) -> dict:
    """Give the loudest new transient at a signal's time."""
    row = {"gps_time": signal.time_ns / NS, "kind": signal.kind, "snr": signal.snr}
    near = round(NEAR_S * NS)
    start, end = (
        to_ns_array(found[c].to_numpy(float)) for c in ("gps_start", "gps_end")
    )
    here = (start < signal.time_ns + near) & (end > signal.time_ns - near)
    rows = found[here & is_new(found, before)]
    if not len(rows):
        return row | {"found": False, "family": ""}
    best = rows.loc[rows["snr"].idxmax()]
    return row | {
        "found": True,
        "gps_start": best["gps_start"],
        "gps_end": best["gps_end"],
        "found_snr": best["snr"],
        "family": best["family"],
    }
