"""What the chosen vetoes are worth, measured without flattering them."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import asdict, dataclass

import numpy as np
import pandas as pd

from dq.config import Vetoes
from dq.cost import (
    ALL,
    Background,
    Selection,
    actuated_losses,
    cost_of,
    held_out,
    random_times,
    signal_losses,
    union_of,
    veto_segments,
    volume_time,
    volume_time_columns,
)
from dq.segments import NS, Segments, to_ns_array

#: Every random draw of a night starts here, with the start of its analysed time: the
#: same night gives the same numbers.
_SEED = 20250101


@dataclass(frozen=True)
class Search:
    """The triggers of the user's own search.

    Attributes
    ----------
    name : str
        As it is called in sentences.
    triggers : pandas.DataFrame
        ``gps_time`` and ``snr``.
    """

    name: str
    triggers: pd.DataFrame


def measure_vetoes(
    vetoes: pd.DataFrame,
    strain: pd.DataFrame,
    select: Callable[[Segments], Selection],
    *,
    analysed: Segments,
    settings: Vetoes,
    planted: pd.DataFrame | None = None,
    search: Search | None = None,
    signals: np.ndarray | None = None,
) -> tuple[pd.DataFrame, dict]:
    """Measure vetoes on data they were not chosen from, on signals and for a search.

    Parameters
    ----------
    vetoes : pandas.DataFrame
        ``dq.tables.VETOES``, the chosen ones.
    strain : pandas.DataFrame
        ``dq.tables.TRANSIENTS``.
    select : callable
        Selects and chooses on part of the time.
    analysed : Segments
    settings : dq.config.Vetoes
    planted : pandas.DataFrame, optional
        ``dq.tables.PLANTED``.
    search : Search, optional
        By default the strain's transients are the background.
    signals : ndarray of int64, optional
        Times of test signals, nanoseconds.

    Returns
    -------
    cost : pandas.DataFrame
        ``dq.tables.VETO_COST``.
    volume : dict
        ``volume_time_ratio`` of the summary.
    """
    segments = veto_segments(vetoes, analysed)
    first = int(analysed.starts[0]) // NS if analysed else 0
    parts = []
    if settings.held_out_block_s > 0:
        times = to_ns_array(strain["gps_time"].to_numpy(float))
        times = times[analysed.contains(times)]
        block_s = settings.held_out_block_s
        parts.append(held_out(select, times, analysed=analysed, block_s=block_s))
    drawn = random_times(
        analysed, settings.signal_times, np.random.default_rng([_SEED, first, 1])
    )
    rows = vetoes[vetoes["source"] == "family"].drop_duplicates("veto")
    families = dict(zip(rows["veto"].astype(str), rows["family"], strict=True))
    padding_s = settings.family_padding_s
    parts.append(
        signal_losses(
            segments, drawn, families=families, planted=planted, padding_s=padding_s
        )
    )
    if signals is not None:
        parts.append(actuated_losses(segments, signals, analysed=analysed))
    background = Background(
        strain if search is None else search.triggers,
        analysed=analysed,
        rate_hz=settings.false_alarm_rate_hz,
    )
    parts.append(volume_time_columns(segments, background))
    cost = cost_of(vetoes, strain, analysed=analysed, parts=parts)
    union = union_of(segments.values())
    found = volume_time(background, union, np.random.default_rng([_SEED, first, 2]))
    volume = asdict(found)
    volume["background"] = "strain transients" if search is None else search.name
    return cost, volume


def total_row(cost: pd.DataFrame) -> pd.Series:
    """Give the row that measures all vetoes together."""
    return cost[cost["veto"] == ALL].iloc[0]
