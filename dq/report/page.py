"""The page for people, made from the folder's tables alone."""

from __future__ import annotations

from pathlib import Path

import pandas as pd

from dq.cost import actuated_words, losing_vetoes, volume_sentence
from dq.gps import gps_to_utc_text
from dq.report.night_tables import NightTables, read_night
from dq.segments import NS, seconds_text
from dq.tables import kind_of
from dq.writers import write_atomically

PAGE = "index.html"

#: Rows of a table that are shown at once; the rest folds away.
_OPEN_ROWS = 30


def write_page(directory: str | Path) -> Path:
    """Write ``index.html`` from the tables of a night's folder.

    Parameters
    ----------
    directory : str or Path

    Returns
    -------
    Path

    Raises
    ------
    InputError
        The folder holds no night.
    OutputError
        The page cannot be written.
    """
    night = read_night(directory)
    path = Path(directory) / PAGE
    write_atomically(path, render(night))
    return path


def render(night: NightTables) -> str:
    """Render the page; equal tables give equal text."""
    from dq.report.figures import map_of_transients, snr_distribution, trade_off

    template = environment().get_template("night.html")
    return template.render(
        site=night.site,
        strain=night.strain_name,
        gps=(seconds_text(night.start_ns), seconds_text(night.end_ns)),
        utc=[gps_to_utc_text(t / NS) for t in (night.start_ns, night.end_ns)],
        version=night.manifest.get("dq_version", ""),
        facts=facts(night),
        sentences=sentences(night),
        families=_families(night),
        groups=_groups(night),
        map=map_of_transients(night),
        curve=trade_off(night),
        worth=worth(night),
        distribution=snr_distribution(night),
        vetoes=_vetoes(night),
        witnesses=_witnesses(night.accepted()),
        others=_witnesses(_others(night)),
        left_out=_left_out(night),
        gaps=_gaps(night),
        loudest=_loudest(night),
        channels=_channels(night),
        open_rows=_OPEN_ROWS,
    )


def environment():
    """Give the templates: escaped, and strict about what they name."""
    from jinja2 import Environment, PackageLoader, StrictUndefined

    return Environment(
        loader=PackageLoader("dq.report"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )


def percent(value, digits: int = 1) -> str:
    """Write a fraction as percent; nothing for a missing one."""
    return "–" if pd.isna(value) else f"{100 * float(value):.{digits}f} %"


def span(seconds: float) -> str:
    """Write a duration as people say it."""
    if seconds < 120:
        return f"{seconds:.3g} s"
    if seconds < 7200:
        return f"{seconds / 60:.1f} min"
    return f"{seconds / 3600:.2f} h"


def facts(night: NightTables) -> list[tuple[str, str, str]]:
    """Give the figures at the head of the page: value, name, note."""
    total = night.cost[night.cost["veto"] == "all"].iloc[0]
    analysed = night.time("analysed").total_s
    share = analysed / max((night.end_ns - night.start_ns) / NS, 1e-9)
    loud = int((night.strain["snr"] >= 8).sum())
    return [
        (span(analysed), "analysed", f"{percent(share)} of the time asked for"),
        (f"{len(night.strain)}", "strain transients", f"{loud} of SNR 8 or more"),
        (percent(total["efficiency"]), "removed by vetoes", _by_chance(total)),
        (
            percent(total["dead_time_fraction"], 2),
            "dead time",
            f"{span(total['dead_time_s'])} of analysed time",
        ),
        (
            f"{night.accepted()['channel'].nunique()}",
            "witnesses",
            _of_channels(night.witnesses["channel"].unique()),
        ),
    ]


def _of_channels(names) -> str:
    derived = sum("@" in name for name in names)
    more = f" and {derived} derived" if derived else ""
    return f"of {len(names) - derived}{more} channels"


def _by_chance(total) -> str:
    return f"{total['expected_by_chance']:.1f} transients expected by chance"


def sentences(night: NightTables) -> list[str]:
    """Say the night in plain words."""
    out = []
    missing, unjudged = night.time("missing"), night.time("unjudged")
    if missing or unjudged:
        out.append(
            f"Of the strain, {span(missing.total_s)} are missing and "
            f"{span(unjudged.total_s)} were recorded but not judged; that time is "
            "neither clean nor vetoed."
        )
    left = night.channels[night.channels["status"] == "left_out"]
    if len(left):
        names = ", ".join(left["channel"].tolist()[:5])
        more = f" and {len(left) - 5} more" if len(left) > 5 else ""
        verb = "was" if len(left) == 1 else "were"
        out.append(f"{names}{more} {verb} left out; the reasons stand below.")
    untraced = night.summary.get("untraced_fraction")
    if untraced is not None and len(night.strain):
        low, high = night.summary.get("untraced_interval") or (None, None)
        sure = "" if low is None else f" (95 % interval {_interval(low, high)})"
        out.append(
            f"No accepted witness was active at {percent(untraced)} of the strain's "
            f"transients{sure}."
        )
    sorting = night.summary.get("sorting") or {}
    if sorting.get("unknowns"):
        out.append(f"The sorter declined {sorting['unknowns']}.")
    if sorting.get("drift"):
        out.append(f"Beware, {sorting['drift']}: the sorter may be out of date.")
    if not len(night.strain):
        out.append("No transient was found above the threshold.")
    elif not len(night.accepted()):
        out.append("No witness was found beyond chance.")
    return out


def _families(night: NightTables) -> list[dict]:
    """Give a row for each family, the most frequent first; none without a sorter."""
    strain = night.strain
    if not len(strain) or set(strain["family"]) <= {"unsorted"}:
        return []
    rows = []
    for name, part in strain.groupby("family", sort=True):
        seen = part["witness"].fillna("").str.split(";").explode()
        seen = seen[seen != ""].value_counts()
        rows.append(
            {
                "name": str(name),
                "count": len(part),
                "share": percent(len(part) / len(strain)),
                "snr": f"{part['snr'].median():.1f}",
                "sure": percent(part["probability"].mean()),
                "vetoed": percent((part["veto"].fillna("") != "").mean()),
                "witness": _text(seen.index[0]) if len(seen) else "",
            }
        )
    return sorted(rows, key=lambda row: (-row["count"], row["name"]))


def _groups(night: NightTables) -> list[dict]:
    return (night.summary.get("sorting") or {}).get("groups") or []


def _vetoes(night: NightTables) -> list[dict]:
    rows = []
    for row in night.cost.itertuples():
        rows.append(
            {
                "name": row.veto,
                "category": "" if pd.isna(row.category) else int(row.category),
                "source": _text(row.source),
                "channel": _text(row.channel),
                "segments": row.segments,
                "dead": f"{row.dead_time_s:.2f}",
                "share": percent(row.dead_time_fraction, 3),
                "removed": row.removed,
                "efficiency": percent(row.efficiency),
                "loud": percent(row.efficiency_snr8),
                "loudest": percent(row.efficiency_snr20),
                "use": percent(row.use_fraction),
                "chance": f"{row.expected_by_chance:.2f}",
                "held": _interval(row.held_out_low, row.held_out_high),
                "over": _number(row.efficiency_over_dead_time, "{:.3g}"),
                "over_range": _range(
                    row.efficiency_over_dead_time_low,
                    row.efficiency_over_dead_time_high,
                ),
                "lost_range": _interval(row.signal_loss_low, row.signal_loss_high),
                "volume_beside": _number(row.volume_time_unique, "{:.3f}"),
                "only": row.unique_removed,
                "only_dead": f"{row.unique_dead_time_s:.2f}",
                "lost": percent(row.signal_loss, 2),
                "tests": _number(row.test_signals_vetoed, "{:.0f}"),
                "tests_chance": _number(
                    row.test_signals * row.dead_time_fraction, "{:.2g}"
                ),
                "tests_p": _number(row.test_signals_p_value, "{:.2g}"),
                "volume": _number(row.volume_time_ratio, "{:.3f}"),
            }
        )
    return rows


def _interval(low, high) -> str:
    return "–" if pd.isna(low) else f"{100 * low:.1f}–{100 * high:.1f} %"


def _range(low, high) -> str:
    return "–" if pd.isna(low) else f"{low:.3g}–{high:.3g}"


def _number(value, text: str) -> str:
    return "–" if pd.isna(value) else text.format(value)


def worth(night: NightTables) -> list[str]:
    """Say what the vetoes do to a search, and which of them lose."""
    if len(night.cost) < 2:
        return []
    volume = night.summary.get("volume_time_ratio") or {}
    losing = losing_vetoes(night.cost)
    return [volume_sentence(volume), *losing, *actuated_words(night.cost)]


def _text(value) -> str:
    return "" if pd.isna(value) else str(value)


def _others(night: NightTables) -> pd.DataFrame:
    return night.witnesses[~night.witnesses["accepted"].fillna(False).astype(bool)]


def _settings(row) -> str:
    """Say what of a channel counts, and how far around it."""
    slow = kind_of(row.channel) in ("motion", "fringe")
    measure = "ratio" if slow else "SNR"
    what = "peak" if row.around == "peak" else "activity"
    return f"{measure} ≥ {row.snr_threshold:g}, {what} ± {row.half_window_s:g} s"


def _witnesses(rows: pd.DataFrame) -> list[dict]:
    top = rows["significance"].max() if len(rows) else 1.0
    out = []
    for row in rows.itertuples():
        tested = not pd.isna(row.significance)
        out.append(
            {
                "channel": row.channel,
                "target": _text(row.target),
                "settings": _settings(row) if tested else "–",
                "coincidences": row.coincidences if tested else "–",
                "expected": f"{row.expected:.2f}" if tested else "–",
                "significance": f"{row.significance:.1f}" if tested else "–",
                "bar": 100 * row.significance / top if tested and top else 0,
                "chance": f"{row.p_value:.2g}" if tested else "–",
                "efficiency": percent(row.efficiency),
                "use": percent(row.use_fraction),
                "safety": _text(row.safety),
                "reason": _text(row.reason),
            }
        )
    return out


def _left_out(night: NightTables) -> list[tuple[str, str]]:
    return sorted(night.manifest.get("left_out", {}).items())


def _gaps(night: NightTables) -> list[tuple[str, str, int, str]]:
    """List time that was not judged or is faulty: channel, kind, pieces, length."""
    rows = night.coverage[night.coverage["kind"] != "analysed"]
    out = []
    for (channel, kind), part in rows.groupby(["channel", "kind"], sort=False):
        seconds = float((part["gps_end"] - part["gps_start"]).sum()) / NS
        out.append((channel, str(kind).replace("_", " "), len(part), f"{seconds:.3f}"))
    return out


def _loudest(night: NightTables) -> list[dict]:
    rows = night.strain.sort_values("snr", ascending=False, kind="stable").head(15)
    return [
        {
            "gps": f"{row.gps_time:.3f}",
            "utc": gps_to_utc_text(row.gps_time)[11:],
            "frequency": f"{row.frequency_hz:.1f}",
            "snr": f"{row.snr:.1f}",
            "length": f"{row.gps_end - row.gps_start:.2f}",
            "family": _text(row.family),
            "witness": _text(row.witness).replace(";", ", ") or "none",
            "veto": _text(row.veto).replace(";", ", ") or "none",
        }
        for row in rows.itertuples()
    ]


def _channels(night: NightTables) -> list[dict]:
    return [
        {
            "channel": row.channel,
            "role": row.role,
            "rate": "" if pd.isna(row.sample_rate_hz) else f"{row.sample_rate_hz:g}",
            "band": ""
            if pd.isna(row.f_low_hz)
            else f"{row.f_low_hz:.3g} – {row.f_high_hz:.4g}",
            "analysed": "" if pd.isna(row.analysed_s) else f"{row.analysed_s:.1f}",
            "transients": "" if pd.isna(row.transients) else int(row.transients),
            "status": _text(row.status).replace("_", " "),
            "reason": _text(row.reason),
        }
        for row in night.channels.itertuples()
    ]
