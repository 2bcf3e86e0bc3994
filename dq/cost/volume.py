"""What vetoes are worth to a search: volume x time at a fixed false alarm rate.

A search calls a candidate significant where its background gives few events as loud.
Vetoes lower the background, so that quieter signals count: at fixed false alarm rate R
the loudness needed falls from rho_before to rho_after, the distance reached grows by
rho_before / rho_after, and the volume by its cube. They also take away the fraction d
of the time. So

    ratio = (1 - d) (rho_before / rho_after)^3,

with rho the SNR at which the remaining transients come at the rate R, each rate being
that per remaining time. Below 1 the vetoes lose more than they gain. For a Pareto law
N(> rho) ~ rho^-a of which a share e is removed, the ratio is
(1 - d) ((1 - d) / (1 - e))^(3 / a).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from dq.cost.cost import ALL, covered_once, union_of
from dq.segments import NS, Segments, to_ns_array

if TYPE_CHECKING:
    import pandas as pd

#: Fewest transients at the false alarm rate: with fewer the loudness is that of a
#: few outliers (own choice).
LEAST_COUNT = 10

#: Blocks of time that the bootstrap draws, s (own choice: longer than most bursts).
BLOCK_S = 32.0

#: Draws of the bootstrap; 1000 place a 95 % interval's ends well enough.
DRAWS = 1000


@dataclass(frozen=True)
class VolumeTime:
    """The ratio and what it rests on.

    Attributes
    ----------
    value, low, high : float
        Ratio and its 95 % interval; NaN where it cannot be told.
    dead_time_fraction : float
    rate_hz : float
        False alarm rate that was used.
    snr_before, snr_after : float
        Loudness at that rate.
    break_even : float
        Dead-time fraction at which this fall of loudness would bring nothing.
    transients : int
        How many the background consists of.
    """

    value: float
    low: float
    high: float
    dead_time_fraction: float
    rate_hz: float
    snr_before: float
    snr_after: float
    break_even: float
    transients: int


class Background:
    """The transients of a search, or of the strain, in analysed time.

    Parameters
    ----------
    transients : pandas.DataFrame
        ``gps_time`` and ``snr``.
    analysed : Segments
    rate_hz : float
        False alarm rate; raised to ``LEAST_COUNT`` in the analysed time.
    """

    def __init__(self, transients: pd.DataFrame, *, analysed: Segments, rate_hz: float):
        times = to_ns_array(transients["gps_time"].to_numpy(float))
        snr = transients["snr"].to_numpy(float)
        kept = analysed.contains(times) & (snr > 0)
        # loudest first; equal ones in order of time, so that nothing hangs on the sort
        order = np.lexsort((times[kept], -snr[kept]))
        self.times, self.snr = times[kept][order], snr[kept][order]
        self.analysed = analysed
        total_s = analysed.total_s
        self.rate_hz = max(rate_hz, LEAST_COUNT / total_s) if total_s else rate_hz

    @property
    def judged(self) -> bool:
        """Whether there are transients enough to read a loudness off."""
        return len(self.times) >= self.rate_hz * self.analysed.total_s > 0

    def loudness(self, kept: np.ndarray, live_s: float) -> float:
        """Give the SNR at which the kept transients come at the false alarm rate."""
        weights = kept.astype(np.float64)[None, :]
        return float(_loudness(self.snr, weights, self.rate_hz * live_s)[0])

    def ratio(self, segments: Segments) -> float:
        """Give the volume-time ratio of some vetoed time, without interval."""
        live = self.analysed.total_s - segments.total_s
        return self.ratio_of(~segments.contains(self.times), live)

    def ratio_of(self, kept: np.ndarray, live_s: float) -> float:
        """Give the ratio from the transients and the time that are left."""
        if not self.judged or live_s <= 0:
            return float("nan")
        total_s = self.analysed.total_s
        before = self.loudness(np.ones(len(self.times), dtype=bool), total_s)
        return live_s / total_s * (before / self.loudness(kept, live_s)) ** 3


def _loudness(snr: np.ndarray, weights: np.ndarray, counts) -> np.ndarray:
    """Give the SNR above which the weights sum to each count.

    Interpolated in the logarithms of both. Where fewer transients are left than the
    count, it is the lowest SNR of all: below, the list is not complete, and a ratio
    taken with it is rather too small.
    """
    total = np.cumsum(weights, axis=1)
    wanted = np.broadcast_to(np.asarray(counts, dtype=float), (len(weights),))
    out = np.empty(len(weights))
    log_snr = np.log(snr)
    for i, (row, count) in enumerate(zip(total, wanted, strict=True)):
        # the count first reached at each transient; repeats carry no weight
        new = np.flatnonzero(weights[i] > 0)
        if not len(new) or count > row[-1]:
            out[i] = snr[-1]
            continue
        out[i] = np.exp(np.interp(np.log(count), np.log(row[new]), log_snr[new]))
    return out


def volume_time(
    background: Background, segments: Segments, rng: np.random.Generator
) -> VolumeTime:
    """Give the volume-time ratio of vetoed time with its bootstrap interval.

    Parameters
    ----------
    background : Background
    segments : Segments
        Vetoed time within analysed time.
    rng : numpy.random.Generator

    Returns
    -------
    VolumeTime

    Notes
    -----
    The interval is the percentile one over draws of blocks of time with replacement
    (Efron 1979, Ann. Stat. 7 1; by blocks, Künsch 1989, Ann. Stat. 17 1217; both from
    memory): bursts and the dead time that goes with them stay together.
    """
    nan = float("nan")
    total_s = background.analysed.total_s
    dead = segments.total_s / total_s if total_s else nan
    count = len(background.times)
    value = background.ratio(segments)
    if np.isnan(value):
        return VolumeTime(nan, nan, nan, dead, background.rate_hz, nan, nan, nan, count)
    whole = np.ones(count, dtype=bool)
    before = background.loudness(whole, total_s)
    kept = ~segments.contains(background.times)
    after = background.loudness(kept, total_s * (1 - dead))
    draws = _draws(background, segments, kept, rng)
    low, high = np.percentile(draws, [2.5, 97.5]) if len(draws) else (nan, nan)
    return VolumeTime(
        value=value,
        low=min(float(low), value),
        high=max(float(high), value),
        dead_time_fraction=dead,
        rate_hz=background.rate_hz,
        snr_before=before,
        snr_after=after,
        break_even=max(1.0 - (after / before) ** 3, 0.0),
        transients=count,
    )


def _draws(background: Background, segments: Segments, kept, rng) -> np.ndarray:
    grid, live, dead = _blocks(background.analysed, segments)
    if len(grid) < 2:
        return np.zeros(0)
    block = np.searchsorted(grid, background.times, side="right") - 1
    out = []
    # a hundred draws at a time keep the arrays small for 10^5 transients
    for _ in range(DRAWS // 100):
        drawn = rng.multinomial(len(grid), np.full(len(grid), 1 / len(grid)), 100)
        total, gone = drawn @ live, drawn @ dead
        weights = drawn[:, block].astype(np.float64)
        before = _loudness(background.snr, weights, background.rate_hz * total)
        left = total - gone
        some = left > 0
        after = _loudness(
            background.snr,
            weights[some] * kept,
            background.rate_hz * left[some],
        )
        out.append(left[some] / total[some] * (before[some] / after) ** 3)
    return np.concatenate(out)


def _blocks(analysed: Segments, segments: Segments):
    """Give the starts of blocks on the GPS grid, their analysed and vetoed time (s)."""
    block = round(BLOCK_S * NS)
    first, last = analysed.starts[0] // block, -(-analysed.ends[-1] // block)
    grid = np.arange(first, last + 1, dtype=np.int64) * block
    live, dead = (np.diff(_before(s, grid)) / NS for s in (analysed, segments))
    some = live > 0
    return grid[:-1][some], live[some], dead[some]


def _before(segments: Segments, times: np.ndarray) -> np.ndarray:
    """Give the covered time before each moment, nanoseconds."""
    if not segments:
        return np.zeros(len(times), dtype=np.int64)
    lengths = segments.ends - segments.starts
    total = np.cumsum(lengths)
    index = np.searchsorted(segments.starts, times, side="right") - 1
    safe = np.maximum(index, 0)
    inside = np.minimum(times - segments.starts[safe], lengths[safe])
    return np.where(index < 0, 0, total[safe] - lengths[safe] + inside)


def volume_time_columns(
    segments: Mapping[str, Segments], background: Background
) -> pd.DataFrame:
    """Give each veto's ratio alone and beside all others, indexed by veto.

    ``volume_time_unique`` is the ratio of all vetoes over that of all but this one:
    below 1 the search is better off without it.
    """
    import pandas as pd

    names = list(segments)
    union, once = union_of(segments.values()), covered_once(list(segments.values()))
    left_s = background.analysed.total_s - union.total_s
    holds = [segments[n].contains(background.times) for n in names]
    depth = np.sum(holds, axis=0) if holds else np.zeros(len(background.times))
    whole = background.ratio_of(depth == 0, left_s)
    rows = {}
    for name, mine in zip(names, holds, strict=True):
        # what no other veto has comes back when this one is left out
        others_s = left_s + (segments[name] & once).total_s
        others = background.ratio_of(depth == mine, others_s)
        rows[name] = (background.ratio(segments[name]), whole / others)
    rows[ALL] = (whole, whole)
    columns = ["volume_time_ratio", "volume_time_unique"]
    return pd.DataFrame.from_dict(rows, orient="index", columns=columns, dtype=float)
