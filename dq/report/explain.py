"""What a night knows about one time."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd

from dq.errors import InputError
from dq.gps import gps_to_utc_text
from dq.report.night_tables import NightTables, read_night, segments_of
from dq.segments import NS, Segments, seconds_text, to_ns, to_ns_array
from dq.witnesses import veto_windows
from dq.writers import read_transients_h5

_UNJUDGED = {
    "missing": "no data were recorded",
    "unjudged": "recorded, but too near an end of the data or with too little data for "
    "a spectrum",
}


def explain(directory: str | Path, gps, *, window_s: float = 1.0) -> str:
    """Tell whether a time is analysed and vetoed, by what, and what is near.

    Parameters
    ----------
    directory : str or Path
        A finished night.
    gps : int, str, Decimal or float
        GPS seconds.
    window_s : float
        How near is near, s.

    Returns
    -------
    str
        Several lines; the last is a sentence to write down.

    Raises
    ------
    InputError
        The folder holds no night, or the time lies outside its range.
    """
    night = read_night(directory)
    time_ns = to_ns(gps)
    if not night.start_ns <= time_ns < night.end_ns:
        raise InputError(
            f"GPS {gps} lies outside the night, {seconds_text(night.start_ns)} to "
            f"{seconds_text(night.end_ns)}; choose a time inside or another night"
        )
    status, analysed = _status(night, time_ns)
    covering = _covering(night, time_ns)
    near = _near(night.strain, time_ns, window_s)
    active = _active(night, time_ns)
    heard = _heard(night, time_ns, window_s)
    lines = [
        f"GPS {seconds_text(time_ns)} ({gps_to_utc_text(time_ns / NS)} UTC), "
        f"{night.site}, {night.strain_name}",
        f"  analysed: {status}",
        f"  vetoed: {_veto_text(night, time_ns, covering)}",
        *_transient_lines(near, time_ns, window_s),
        *_witness_lines(night, active, heard, window_s),
        "  to write down: " + _sentence(time_ns, analysed, covering, near, active),
    ]
    return "\n".join(lines)


def _status(night: NightTables, time_ns: int) -> tuple[str, bool]:
    if night.time("analysed").contains([time_ns])[0]:
        return "yes", True
    for kind, text in _UNJUDGED.items():
        if night.time(kind).contains([time_ns])[0]:
            return f"no, {text}; this time is neither clean nor vetoed", False
    return "no, outside the ready time; this time is neither clean nor vetoed", False


def _covering(night: NightTables, time_ns: int) -> pd.DataFrame:
    rows = night.vetoes
    inside = (rows["gps_start"] <= time_ns) & (time_ns < rows["gps_end"])
    return rows[inside]


def _veto_text(night: NightTables, time_ns: int, covering: pd.DataFrame) -> str:
    if len(covering):
        return "; ".join(
            f"yes, by {row.veto} (category {row.category}, {row.source}"
            + (f", {row.channel}" if row.channel else "")
            + f", {seconds_text(row.gps_start)} to {seconds_text(row.gps_end)})"
            for row in covering.itertuples()
        )
    union = segments_of(night.vetoes)
    if not union:
        return "no; the night has no vetoes"
    distance, edge = _distance(union, time_ns)
    rows = night.vetoes
    name = rows[(rows["gps_start"] == edge) | (rows["gps_end"] == edge)]["veto"]
    which = f" ({name.iloc[0]})" if len(name) else ""
    return f"no; the nearest veto{which} is {distance / NS:.3f} s away"


def _distance(segments: Segments, time_ns: int) -> tuple[int, int]:
    edges = np.concatenate([segments.starts, segments.ends])
    nearest = int(np.argmin(np.abs(edges - time_ns)))
    return int(abs(edges[nearest] - time_ns)), int(edges[nearest])


def _near(table: pd.DataFrame, time_ns: int, window_s: float) -> pd.DataFrame:
    start = to_ns_array(table["gps_start"].to_numpy(float))
    end = to_ns_array(table["gps_end"].to_numpy(float))
    half = round(window_s * NS)
    return table[(start < time_ns + half) & (end > time_ns - half)]


def _offset(seconds: float, time_ns: int) -> str:
    return f"{(int(to_ns_array([seconds])[0]) - time_ns) / NS:+.3f} s"


def _transient_lines(near: pd.DataFrame, time_ns: int, window_s: float) -> list[str]:
    if not len(near):
        return [f"  strain transients within {window_s:g} s: none"]
    lines = [f"  strain transients within {window_s:g} s: {len(near)}"]
    for row in near.sort_values("snr", ascending=False, kind="stable").itertuples():
        sure = "" if pd.isna(row.probability) else f" ({row.probability:.2f})"
        lines.append(
            f"    {_offset(row.gps_time, time_ns)}: SNR {row.snr:.1f} at "
            f"{row.frequency_hz:.1f} Hz ({row.f_low_hz:.0f}-{row.f_high_hz:.0f} Hz), "
            f"{row.gps_end - row.gps_start:.2f} s long, family {row.family}{sure}"
        )
    return lines


def _active(night: NightTables, time_ns: int) -> list:
    """Give the accepted witnesses whose windows hold the time."""
    accepted = night.accepted()
    path = night.directory / "transients.h5"
    tables = read_transients_h5(path, accepted["channel"].tolist())
    out = []
    for row in accepted.itertuples():
        windows = veto_windows(
            tables.get(row.channel, night.strain.iloc[:0]),
            snr_threshold=row.snr_threshold,
            half_window_s=row.half_window_s,
        )
        if windows.contains([time_ns])[0]:
            out.append(row)
    return out


def _heard(night: NightTables, time_ns: int, window_s: float) -> list[str]:
    """Say what the accepted witnesses heard near the time."""
    channels = night.accepted()["channel"].tolist()
    tables = read_transients_h5(night.directory / "transients.h5", channels)
    lines = []
    for channel in channels:
        near = _near(tables.get(channel, night.strain.iloc[:0]), time_ns, window_s)
        if len(near):
            best = near.loc[near["snr"].idxmax()]
            loud = f"SNR {best['snr']:.1f} at {best['frequency_hz']:.1f} Hz"
            lines.append(f"    {channel}: {loud}, {_offset(best['gps_time'], time_ns)}")
    return lines


def _witness_lines(night: NightTables, active, heard, window_s: float) -> list[str]:
    if not len(night.accepted()):
        return ["  witnesses: the night has none"]
    lines = ["  witnesses active now: " + ("none" if not active else "")]
    lines[0] = lines[0].rstrip()
    for row in active:
        # the fraction of time that the channel's windows fill
        analysed = max(night.time("analysed", row.channel).total_s, 1e-9)
        chance = row.dead_time_s / analysed
        lines.append(
            f"    {row.channel}: SNR >= {row.snr_threshold:g} within "
            f"{row.half_window_s:g} s; active by chance with probability {chance:.3g}; "
            f"association p = {row.p_value:.2g}; {row.safety}"
        )
    lines.append(f"  heard by witnesses within {window_s:g} s:")
    return lines + heard if heard else [*lines[:-1], lines[-1] + " nothing"]


def _sentence(time_ns: int, analysed, covering, near, active) -> str:
    at = seconds_text(time_ns)
    if not analysed:
        return f"GPS {at} was not analysed, so its data quality is not known."
    names = ", ".join(row.channel for row in active)
    if len(covering):
        vetoes = ", ".join(dict.fromkeys(covering["veto"]))
        worst = int(covering["category"].min())
        advice = "its data cannot be used."
        if worst > 1:
            advice = (
                "check that no signal reaches the witness before the time is given up."
            )
        return f"GPS {at} is vetoed by {vetoes} (category {worst}); {advice}"
    if len(near):
        loudest = near.loc[near["snr"].idxmax()]
        seen = f"witnessed by {names}" if active else "without a witness"
        return (
            f"GPS {at} is analysed and not vetoed; the strain has a transient of SNR "
            f"{loudest['snr']:.1f} at {loudest['frequency_hz']:.0f} Hz near it, {seen}."
        )
    seen = f"although {names} was active" if active else "and no witness was active"
    return f"GPS {at} is analysed, not vetoed, without a strain transient near, {seen}."
