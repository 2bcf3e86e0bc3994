"""What a night's tables say about one time, gathered without a word of text."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from dq.report.night_tables import NightTables
from dq.segments import NS, Segments, to_ns_array
from dq.witnesses import windows_of
from dq.writers import read_transients_h5

#: Kinds of coverage that are no fault.
_ACCOUNTED = ("analysed", "missing", "unjudged")

#: What is read of the witnesses' transients.
_READ = ("gps_time", "gps_start", "gps_end", "snr", "frequency_hz")


@dataclass(frozen=True)
class Witness:
    """What an accepted witness did at the time.

    Attributes
    ----------
    row : namedtuple
        Of ``dq.tables.WITNESSES``.
    active : bool
        Whether one of its windows holds the time.
    chance : float
        Probability that a random analysed time falls into its windows.
    loudest : pandas.Series or None
        Its loudest transient near the time.
    """

    row: object
    active: bool
    chance: float
    loudest: pd.Series | None


@dataclass(frozen=True)
class Nearest:
    """The nearest segment of a kind: its name and how far its edge is, nanoseconds.

    ``distance_ns`` is 0 inside, positive where the segment follows the time and
    negative where it comes before.
    """

    name: str
    distance_ns: int


@dataclass(frozen=True)
class OneTime:
    """All that is known about one time.

    Attributes
    ----------
    time_ns : int
    kind : str
        ``analysed``, ``missing``, ``unjudged`` or ``not wanted``.
    covering : pandas.DataFrame
        Rows of ``vetoes.csv`` that hold the time.
    nearest_veto, nearest_fault : Nearest or None
    near : pandas.DataFrame
        Strain transients that touch the window, loudest first.
    witnesses : list of Witness
        The accepted ones in their order.
    any_chance : float
        Probability that a random analysed time finds any of them active.
    """

    time_ns: int
    kind: str
    covering: pd.DataFrame
    nearest_veto: Nearest | None
    nearest_fault: Nearest | None
    near: pd.DataFrame
    witnesses: list[Witness]
    any_chance: float

    @property
    def analysed(self) -> bool:
        """Whether the time was judged at all."""
        return self.kind == "analysed"

    @property
    def active(self) -> list[Witness]:
        """The witnesses whose windows hold the time."""
        return [w for w in self.witnesses if w.active]


def look_at(night: NightTables, time_ns: int, *, window_s: float) -> OneTime:
    """Gather what a night knows about a time.

    Parameters
    ----------
    night : NightTables
    time_ns : int
        Within the night's range.
    window_s : float
        How near is near, s.
    """
    kinds = ("analysed", "missing", "unjudged")
    kind = next((k for k in kinds if _holds(night.time(k), time_ns)), "not wanted")
    rows = night.vetoes
    inside = (rows["gps_start"] <= time_ns) & (time_ns < rows["gps_end"])
    strain = night.strain_name
    faults = night.coverage[night.coverage["channel"] == strain]
    faults = faults[~faults["kind"].isin(_ACCOUNTED)]
    near = _touching(night.strain, time_ns, window_s)
    witnesses, any_chance = _witnesses(night, time_ns, window_s)
    return OneTime(
        time_ns=time_ns,
        kind=kind,
        covering=rows[inside],
        nearest_veto=_nearest(rows, "veto", time_ns),
        nearest_fault=_nearest(faults, "kind", time_ns),
        near=near.sort_values("snr", ascending=False, kind="stable"),
        witnesses=witnesses,
        any_chance=any_chance,
    )


def rows_near(time_ns: int, *, reach_s: float) -> Callable[[pd.DataFrame], np.ndarray]:
    """Give a choice of the rows that can matter for a time, from their cells as text.

    Parameters
    ----------
    time_ns : int
    reach_s : float
        Rows whose ``gps_start`` to ``gps_end`` come so near are kept, s, and always the
        nearest ones.
    """
    time_s = time_ns / NS

    def keep(cells: pd.DataFrame) -> np.ndarray:
        start = cells["gps_start"].to_numpy(float)
        end = cells["gps_end"].to_numpy(float)
        away = np.maximum(np.maximum(start - time_s, time_s - end), 0.0)
        nearest = away.min() if len(away) else 0.0
        # floats of GPS seconds are good to a quarter of a microsecond
        return away <= max(reach_s, nearest) + 1e-3

    return keep


def _holds(segments: Segments, time_ns: int) -> bool:
    return bool(segments.contains([time_ns])[0])


def _nearest(rows: pd.DataFrame, name: str, time_ns: int) -> Nearest | None:
    if not len(rows):
        return None
    starts, ends = (rows[c].to_numpy(np.int64) for c in ("gps_start", "gps_end"))
    # the last time that a segment holds is one nanosecond before its end
    distance = np.where(
        time_ns < starts, starts - time_ns, np.minimum(ends - 1 - time_ns, 0)
    )
    best = int(np.argmin(np.abs(distance)))
    return Nearest(str(rows[name].iloc[best]), int(distance[best]))


def _touching(table: pd.DataFrame, time_ns: int, window_s: float) -> pd.DataFrame:
    start = to_ns_array(table["gps_start"].to_numpy(float))
    end = to_ns_array(table["gps_end"].to_numpy(float))
    half = round(window_s * NS)
    return table[(start < time_ns + half) & (end > time_ns - half)]


def _witnesses(
    night: NightTables, time_ns: int, window_s: float
) -> tuple[list[Witness], float]:
    accepted = night.accepted()
    path = Path(night.directory) / "transients.h5"
    channels = list(dict.fromkeys(accepted["channel"]))
    tables = read_transients_h5(path, channels, columns=_READ) if channels else {}
    analysed = night.time("analysed")
    found, starts, ends = [], [analysed.starts[:0]], [analysed.ends[:0]]
    for row in accepted.itertuples():
        table = tables.get(row.channel)
        if table is None:
            continue
        windows = windows_of(row, table) & analysed
        starts.append(windows.starts)
        ends.append(windows.ends)
        near = _touching(table, time_ns, window_s)
        found.append(
            Witness(
                row=row,
                active=_holds(windows, time_ns),
                chance=_share(windows, analysed),
                loudest=near.loc[near["snr"].idxmax()] if len(near) else None,
            )
        )
    union = Segments(np.concatenate(starts), np.concatenate(ends))
    return found, _share(union, analysed)


def _share(part: Segments, whole: Segments) -> float:
    return part.total_ns / whole.total_ns if whole else float("nan")
