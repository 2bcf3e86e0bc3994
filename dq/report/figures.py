"""The pictures of the page, as PNG data; equal tables give equal bytes."""

from __future__ import annotations

import base64
import io

import matplotlib as mpl
import numpy as np
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.colors import LogNorm
from matplotlib.figure import Figure

from dq.report.night_tables import NightTables, segments_of
from dq.segments import NS, Segments

#: Okabe & Ito 2008 (from memory): colours that colour-blind readers can part.
OKABE_ITO = (
    "#E69F00",
    "#56B4E9",
    "#009E73",
    "#F0E442",
    "#0072B2",
    "#D55E00",
    "#CC79A7",
    "#000000",
)
CATEGORY_STYLE = {
    1: ("#000000", "1 unusable"),
    2: ("#0072B2", "2 safe witness"),
    3: ("#E69F00", "3 association"),
}
_INK = "#22303c"
_STYLE = {
    "font.family": "DejaVu Sans",
    "font.size": 10,
    "axes.edgecolor": _INK,
    "axes.labelcolor": _INK,
    "xtick.color": _INK,
    "ytick.color": _INK,
    "axes.spines.top": False,
    "axes.spines.right": False,
}


def _png(figure: Figure) -> str:
    buffer = io.BytesIO()
    FigureCanvasAgg(figure)
    figure.savefig(buffer, format="png", dpi=130, metadata={"Software": None})
    return "data:image/png;base64," + base64.b64encode(buffer.getvalue()).decode()


def _minutes(segments: Segments, start_ns: int) -> list[tuple[float, float]]:
    scale = 60 * NS
    return [((s - start_ns) / scale, (e - s) / scale) for s, e in segments]


def map_of_transients(night: NightTables) -> str:
    """Draw the strain's transients over time and frequency, vetoes above."""
    with mpl.rc_context(_STYLE):
        figure = Figure(figsize=(11, 5.2), layout="constrained")
        bands, axes = figure.subplots(
            2, 1, sharex=True, gridspec_kw={"height_ratios": [1, 7]}
        )
        _veto_bands(bands, night)
        _unjudged_hatch(axes, night)
        strain = night.strain.sort_values("snr", kind="stable")
        if len(strain):
            minutes = (strain["gps_time"].to_numpy(float) - night.start_ns / NS) / 60
            snr = strain["snr"].to_numpy(float)
            top = max(float(snr.max()), 20.0)
            points = axes.scatter(
                minutes,
                strain["frequency_hz"].to_numpy(float),
                c=snr,
                s=10 + 22 * np.log10(np.maximum(snr / 5, 1)),
                cmap="cividis",
                norm=LogNorm(5, top),
                linewidths=0.3,
                edgecolors="white",
                rasterized=True,
                zorder=3,
            )
            figure.colorbar(points, ax=[bands, axes], label="SNR", pad=0.01)
        axes.set_yscale("log")
        axes.set_ylabel("frequency (Hz)")
        axes.set_xlabel("minutes after the start")
        axes.set_xlim(0, (night.end_ns - night.start_ns) / NS / 60)
        axes.grid(alpha=0.25, which="major")
        return _png(figure)


def _veto_bands(axes, night: NightTables) -> None:
    for level, (category, (colour, _)) in enumerate(CATEGORY_STYLE.items()):
        rows = night.vetoes[night.vetoes["category"] == category]
        spans = _minutes(segments_of(rows), night.start_ns)
        # a veto of a tenth of a second must still be seen on a line of hours
        least = (night.end_ns - night.start_ns) / NS / 60 / 900
        spans = [(s, max(w, least)) for s, w in spans]
        axes.broken_barh(spans, (2 - level + 0.1, 0.8), color=colour, linewidth=0)
    axes.set_ylim(0, 3)
    labels = [label for _, label in CATEGORY_STYLE.values()]
    axes.set_yticks([2.5, 1.5, 0.5], labels, fontsize=8)
    axes.tick_params(left=False)
    axes.spines["left"].set_visible(False)
    axes.tick_params(labelbottom=False)


def _unjudged_hatch(axes, night: NightTables) -> None:
    outside = night.time("analysed").complement(night.start_ns, night.end_ns)
    for start, width in _minutes(outside, night.start_ns):
        axes.axvspan(
            start,
            start + width,
            facecolor="#eeeeee",
            edgecolor="#9aa5ad",
            hatch="////",
            linewidth=0,
            zorder=1,
        )


def trade_off(night: NightTables) -> str:
    """Draw what each dead time removes, and what no choice could exceed."""
    curve = night.curve
    dead = 100 * curve["dead_time_fraction"].to_numpy(float)
    gain = 100 * curve["gain"].to_numpy(float)
    chosen = curve["chosen"].fillna(False).to_numpy(bool)
    budget = night.manifest["config"].get("vetoes", {}).get("max_dead_time")
    with mpl.rc_context(_STYLE):
        figure = Figure(figsize=(5.4, 3.8), layout="constrained")
        axes = figure.subplots()
        right = max(np.max(dead, initial=0.0) * 1.12, 0.1)
        axes.plot([0, right], [0, right], ":", color="#7f8c96", label="chance")
        if np.isfinite(gain).any():
            bound = 100 * curve["bound"].to_numpy(float)
            axes.plot(dead, bound, "--", color="#D55E00", label="no choice exceeds")
            axes.step(dead, gain, where="post", color="#0072B2", linewidth=1.2)
            for inside, face, label in (
                (chosen, "#0072B2", "vetoes applied"),
                (~chosen, "white", "further vetoes"),
            ):
                axes.plot(
                    dead[inside],
                    gain[inside],
                    "o",
                    markeredgecolor="#0072B2",
                    markerfacecolor=face,
                    label=label,
                )
        if budget is not None and 100 * budget <= right:
            axes.axvline(100 * budget, color=_INK, linewidth=0.8)
            axes.annotate(
                "budget",
                (100 * budget, 2),
                xytext=(3, 0),
                textcoords="offset points",
                fontsize=8,
                color=_INK,
            )
        axes.set_xlim(0, right)
        axes.set_ylim(0, 100)
        axes.set_xlabel("dead time (% of analysed time)")
        axes.set_ylabel("removed (% of the transients' worth)")
        axes.legend(frameon=False, loc="upper left", fontsize=8)
        axes.grid(alpha=0.25)
        return _png(figure)


def snr_distribution(night: NightTables) -> str:
    """Draw how many transients are louder than an SNR, before and after vetoes."""
    snr = np.sort(night.strain["snr"].to_numpy(float))
    left = night.strain["veto"].fillna("") == ""
    after = np.sort(night.strain["snr"].to_numpy(float)[left.to_numpy(bool)])
    with mpl.rc_context(_STYLE):
        figure = Figure(figsize=(5.4, 3.8), layout="constrained")
        axes = figure.subplots()
        for values, style, label in (
            (snr, {"color": "#000000", "linestyle": "--"}, "all"),
            (after, {"color": "#D55E00", "linewidth": 2}, "left after vetoes"),
        ):
            if len(values):
                louder = np.arange(len(values), 0, -1)
                axes.step(values, louder, where="pre", label=label, **style)
        axes.set_xscale("log")
        axes.set_yscale("log")
        axes.set_xlabel("SNR")
        axes.set_ylabel("transients at least this loud")
        if len(snr):
            axes.legend(frameon=False)
        axes.grid(alpha=0.25)
        return _png(figure)
