"""What a night knows about one time, in words."""

from __future__ import annotations

from pathlib import Path

import pandas as pd

from dq.errors import InputError
from dq.gps import gps_to_utc_text
from dq.report.night_tables import NightTables, read_night
from dq.report.one_time import Nearest, OneTime, Witness, look_at, rows_near
from dq.segments import NS, seconds_text, to_ns, to_ns_array
from dq.tables import kind_of

_STATUS = {
    "analysed": "yes",
    "missing": "no, no data were recorded; this time is neither clean nor vetoed",
    "unjudged": "no, recorded, but too near an end of the data or with too little data "
    "for a spectrum; this time is neither clean nor vetoed",
    "not wanted": "no, outside the ready time; this time is neither clean nor vetoed",
}

#: Tables that the answer rests on; the others are not read.
_TABLES = ("strain", "witnesses", "vetoes", "coverage")


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
    time_ns = to_ns(gps)
    keep = {
        "strain": rows_near(time_ns, reach_s=window_s),
        "vetoes": rows_near(time_ns, reach_s=0.0),
    }
    night = read_night(directory, tables=_TABLES, keep=keep)
    if not night.start_ns <= time_ns < night.end_ns:
        raise InputError(
            f"GPS {gps} lies outside the night, {seconds_text(night.start_ns)} to "
            f"{seconds_text(night.end_ns)}; choose a time inside or another night"
        )
    found = look_at(night, time_ns, window_s=window_s)
    lines = [
        f"GPS {seconds_text(time_ns)} ({gps_to_utc_text(time_ns / NS)} UTC), "
        f"{night.site}, {night.strain_name}",
        f"  analysed: {_STATUS[found.kind]}",
        f"  vetoed: {_veto_text(found)}",
        f"  nearest data fault: {_fault_text(found.nearest_fault)}",
        *_transient_lines(found, window_s),
        *_witness_lines(night, found, window_s),
        "  to write down: " + sentence(found),
    ]
    return "\n".join(lines)


def _veto_text(found: OneTime) -> str:
    if len(found.covering):
        return "; ".join(
            f"yes, by {row.veto} (category {row.category}, {row.source}"
            + (f", {row.channel}" if row.channel else "")
            + (f", family {row.family}" if row.family else "")
            + f", {seconds_text(row.gps_start)} to {seconds_text(row.gps_end)})"
            for row in found.covering.itertuples()
        )
    if found.nearest_veto is None:
        return "no; the night has no vetoes"
    name, away = found.nearest_veto.name, _away(found.nearest_veto)
    return f"no; the nearest veto ({name}) is {away}"


def _fault_text(fault: Nearest | None) -> str:
    if fault is None:
        return "the strain has none"
    kind = fault.name.replace("_", " ")
    return f"{kind}, here" if fault.distance_ns == 0 else f"{kind}, {_away(fault)}"


def _away(nearest: Nearest) -> str:
    side = "later" if nearest.distance_ns > 0 else "earlier"
    return f"{abs(nearest.distance_ns) / NS:.3f} s away, {side}"


def _offset(seconds: float, time_ns: int) -> str:
    return f"{(int(to_ns_array([seconds])[0]) - time_ns) / NS:+.3f} s"


def _transient_lines(found: OneTime, window_s: float) -> list[str]:
    if not len(found.near):
        return [f"  strain transients within {window_s:g} s: none"]
    lines = [f"  strain transients within {window_s:g} s: {len(found.near)}"]
    for row in found.near.itertuples():
        vetoed = f", vetoed by {row.veto.replace(';', ', ')}" if row.veto else ""
        lines.append(
            f"    {_offset(row.gps_time, found.time_ns)}: SNR {row.snr:.1f} at "
            f"{row.frequency_hz:.1f} Hz ({row.f_low_hz:.0f}-{row.f_high_hz:.0f} Hz), "
            f"{row.gps_end - row.gps_start:.2f} s long, {_family(row)}{vetoed}"
        )
    return lines


def _family(row) -> str:
    sure = "" if pd.isna(row.probability) else f" (probability {row.probability:.2f})"
    return f"family {row.family or 'unsorted'}{sure}"


def _witness_lines(night: NightTables, found: OneTime, window_s: float) -> list[str]:
    if not len(night.accepted()):
        return ["  witnesses: the night has none"]
    count = len(found.active)
    lines = [
        f"  witnesses active now: {count or 'none'} of {len(found.witnesses)}; "
        f"at a random time any is active with probability {found.any_chance:.3g}"
    ]
    lines += [_active_line(w) for w in found.active]
    heard = [w for w in found.witnesses if w.loudest is not None]
    said = set()
    lines.append(f"  heard by witnesses within {window_s:g} s:")
    for witness in heard:
        if witness.row.channel not in said:
            said.add(witness.row.channel)
            best = witness.loudest
            lines.append(
                f"    {witness.row.channel}: SNR {best['snr']:.1f} at "
                f"{best['frequency_hz']:.1f} Hz, "
                f"{_offset(best['gps_time'], found.time_ns)}"
            )
    return lines if heard else [*lines[:-1], lines[-1] + " nothing"]


def _active_line(witness: Witness) -> str:
    row = witness.row
    target = "" if row.target == "all" else f" for {row.target}"
    association = "" if pd.isna(row.p_value) else f"association p = {row.p_value:.2g}; "
    what = "peak" if row.around == "peak" else "activity"
    measure = "SNR" if kind_of(row.channel) in ("transients", "product") else "ratio"
    return (
        f"    {row.channel}{target}: {measure} >= {row.snr_threshold:g} within "
        f"{row.half_window_s:g} s of its {what}; active at a random time with "
        f"probability {witness.chance:.3g}; {association}{row.safety}"
    )


def sentence(found: OneTime) -> str:
    """Give the sentence that an analyst could write down.

    Parameters
    ----------
    found : OneTime

    Returns
    -------
    str
        Whether the time is judged and vetoed; what the strain has there; which
        witnesses were active and how often they are by chance.
    """
    at = f"GPS {seconds_text(found.time_ns)}"
    if not found.analysed:
        return f"{at} was not analysed, so its data quality is not known."
    if len(found.covering):
        vetoes = ", ".join(dict.fromkeys(found.covering["veto"]))
        worst = int(found.covering["category"].min())
        advice = "its data cannot be used."
        if worst > 1:
            advice = (
                f"{_seen(found)}; check that no signal reaches the witness before the "
                "time is given up."
            )
        if set(found.covering["source"]) == {"family"}:
            advice = (
                "the veto rests on the strain itself, so a signal that was sorted "
                "wrongly would be removed as well; look at it before giving it up."
            )
        return f"{at} is vetoed by {vetoes} (category {worst}); {advice}"
    if len(found.near):
        loudest = found.near.iloc[0]
        return (
            f"{at} is analysed and not vetoed; the strain has a transient of SNR "
            f"{loudest['snr']:.1f} at {loudest['frequency_hz']:.0f} Hz near it, "
            f"{_family(loudest)}; {_seen(found)}."
        )
    return (
        f"{at} is analysed, not vetoed, without a strain transient near; "
        f"{_seen(found)}."
    )


def _seen(found: OneTime) -> str:
    if not found.witnesses:
        return "the night has no witness"
    if not found.active:
        return "no witness was active"
    # a channel may be active at several settings; the rarest says most
    rarest: dict[str, float] = {}
    for witness in found.active:
        name = witness.row.channel
        rarest[name] = min(witness.chance, rarest.get(name, 1.0))
    parts = [f"{name} ({chance:.2g} by chance)" for name, chance in rarest.items()]
    return f"active then: {', '.join(parts)}"
