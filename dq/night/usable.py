"""A channel's result, refused when no time of the channel could be judged."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

from dq.errors import NoDataError
from dq.night import channel

if TYPE_CHECKING:
    from dq.store import ChannelData


def usable_result(data: ChannelData, **options) -> channel.ChannelResult:
    """Analyse a channel; what the reader had to say becomes a note.

    Parameters
    ----------
    data : ChannelData
    **options
        As :func:`dq.night.channel.analyse_channel` takes them.

    Returns
    -------
    ChannelResult
        With some analysed time.

    Raises
    ------
    NoDataError
        No time could be analysed: the samples are not finite, or every stretch is
        shorter than what filter and tiles need to settle.
    DqError
        As :func:`dq.night.channel.analyse_channel`.
    """
    result = channel.analyse_channel(data, **options)
    if not result.analysed:
        broken = result.faults["not_finite"].total_s
        raise NoDataError(
            f"channel {data.name!r}: no time can be analysed; {broken:.6g} s are not "
            f"finite or not readable, {result.unjudged.total_s:.6g} s lie in stretches "
            "too short for filter and tiles to settle"
        )
    notes = [*result.notes, *data.problems, *data.read_problems]
    return replace(result, notes=notes)
