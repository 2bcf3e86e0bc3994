"""Windows around a channel's transients, and how time and events fall into them."""

from __future__ import annotations

import numpy as np

from dq.segments import NS, Segments, to_ns_array


def veto_windows(
    transients,
    *,
    snr_threshold: float,
    before_s: float,
    after_s: float,
    delay_s: float = 0.0,
    around: str = "activity",
) -> Segments:
    """Give the union of windows around a channel's activity above a threshold.

    Parameters
    ----------
    transients : pandas.DataFrame
        Columns ``gps_start``, ``gps_end`` (or ``gps_time``) and ``snr``.
    snr_threshold : float
    before_s, after_s : float
        A window is ``[gps_start - before, gps_end + after)``, moved by the delay.
    delay_s : float
        Strain minus channel, s.
    around : str
        ``activity``, or ``peak``: then start and end are the peak's time.

    Returns
    -------
    Segments
    """
    loud = transients["snr"].to_numpy(float) >= snr_threshold
    names = ("gps_time", "gps_time") if around == "peak" else ("gps_start", "gps_end")
    starts, ends = (to_ns_array(transients[c].to_numpy(float)[loud]) for c in names)
    delay = round(delay_s * NS)
    starts = starts + (delay - round(before_s * NS))
    ends = ends + (delay + round(after_s * NS))
    return Segments.from_arrays(starts, np.maximum(starts, ends))


def windows_of(witness, transients) -> Segments:
    """Give the windows of one row of the witnesses' table.

    Parameters
    ----------
    witness : namedtuple
        A row of ``dq.tables.WITNESSES``; where it tells no window of its own,
        ``half_window_s`` reaches both ways.
    transients : pandas.DataFrame
        The channel's.

    Returns
    -------
    Segments
    """

    def known(name: str, otherwise: float) -> float:
        value = getattr(witness, name, None)
        return otherwise if value is None or value != value else float(value)

    half = float(witness.half_window_s)
    return veto_windows(
        transients,
        snr_threshold=float(witness.snr_threshold),
        before_s=known("before_s", half),
        after_s=known("after_s", half),
        delay_s=known("delay_s", 0.0),
        around=str(getattr(witness, "around", "activity")),
    )


class FusedTime:
    """Segments laid end to end: a position is the covered time before a moment.

    Parameters
    ----------
    segments : Segments
        At least one.
    """

    def __init__(self, segments: Segments):
        lengths = segments.ends - segments.starts
        self._starts = segments.starts
        self._lengths = lengths
        self._before = np.cumsum(lengths) - lengths
        self.total = int(lengths.sum())

    def position(self, times: np.ndarray) -> np.ndarray:
        """Give the covered time before each moment, nanoseconds."""
        index = np.searchsorted(self._starts, times, side="right") - 1
        safe = np.maximum(index, 0)
        inside = np.minimum(times - self._starts[safe], self._lengths[safe])
        return np.where(index < 0, 0, self._before[safe] + inside)


def hits(positions: np.ndarray, starts: np.ndarray, ends: np.ndarray) -> np.ndarray:
    """Give for each position the number of the window that holds it, or -1.

    Parameters
    ----------
    positions : ndarray of int64
    starts, ends : ndarray of int64
        Sorted, disjoint, half-open.
    """
    if len(starts) == 0:
        return np.full(positions.shape, -1)
    index = np.searchsorted(starts, positions, side="right") - 1
    inside = (index >= 0) & (positions < ends[np.maximum(index, 0)])
    return np.where(inside, index, -1)
