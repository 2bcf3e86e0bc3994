"""The pictures of the training page; equal tables give equal bytes."""

from __future__ import annotations

import matplotlib as mpl
import numpy as np
import pandas as pd
from matplotlib.figure import Figure

from dq.report.figures import _STYLE, OKABE_ITO, _png

#: Markers beside the colours: families stay apart in grey and beyond eight.
_MARKERS = "osD^v<>Ph*Xp"


def family_style(number: int) -> dict:
    """Give the colour and marker of a family by its place in the list."""
    return {
        "color": OKABE_ITO[number % len(OKABE_ITO)],
        "marker": _MARKERS[number % len(_MARKERS)],
    }


def scores_picture(families: pd.DataFrame) -> str:
    """Draw precision and recall of each family with exact intervals."""
    count = len(families)
    with mpl.rc_context(_STYLE):
        figure = Figure(figsize=(11, 1.2 + 0.42 * count), layout="constrained")
        axes = figure.subplots()
        place = np.arange(count)[::-1]
        for name, shift, style in (
            ("precision", 0.15, {"color": "#0072B2", "marker": "o"}),
            ("recall", -0.15, {"color": "#D55E00", "marker": "s"}),
        ):
            value = families[name].to_numpy(float)
            low, high = (
                families[f"{name}_{e}"].to_numpy(float) for e in ("low", "high")
            )
            known = np.isfinite(value)
            axes.errorbar(
                value[known],
                place[known] + shift,
                xerr=[(value - low)[known], (high - value)[known]],
                linestyle="none",
                capsize=3,
                label=name,
                **style,
            )
        labels = [f"{r.family} ({r.examples})" for r in families.itertuples()]
        axes.set_yticks(place, labels)
        axes.set_xlim(min(0.5, _least(families)), 1.005)
        axes.set_xlabel("precision and recall, exact 95 % intervals")
        axes.legend(frameon=False, loc="lower left")
        axes.grid(alpha=0.25, axis="x")
        return _png(figure)


def _least(families: pd.DataFrame) -> float:
    lows = families[["precision_low", "recall_low"]].to_numpy(float)
    return float(np.floor(10 * np.nanmin(lows)) / 10)


def reliability_picture(table: pd.DataFrame) -> str:
    """Draw how often the best family was right against its stated probability."""
    with mpl.rc_context(_STYLE):
        figure = Figure(figsize=(5.4, 4.4), layout="constrained")
        axes = figure.subplots()
        axes.plot([0, 1], [0, 1], "--", color="#7f8c96", label="as stated")
        value = table["accuracy"].to_numpy(float)
        low = value - table["accuracy_low"].to_numpy(float)
        high = table["accuracy_high"].to_numpy(float) - value
        axes.errorbar(
            table["confidence"].to_numpy(float),
            value,
            yerr=[low, high],
            fmt="o",
            color="#0072B2",
            capsize=3,
            label="measured, exact 95 %",
        )
        for row in table.itertuples():
            axes.annotate(
                str(row.count_),
                (row.confidence, row.accuracy),
                xytext=(6, -12),
                textcoords="offset points",
                fontsize=8,
            )
        axes.set_xlim(0, 1.02)
        axes.set_ylim(0, 1.02)
        axes.set_xlabel("stated probability of the best family")
        axes.set_ylabel("share that was right")
        axes.legend(frameon=False, loc="lower right")
        axes.grid(alpha=0.25)
        return _png(figure)


def learning_picture(table: pd.DataFrame) -> str:
    """Draw F1 against the number of labels, for each family and their mean."""
    with mpl.rc_context(_STYLE):
        figure = Figure(figsize=(5.4, 4.4), layout="constrained")
        axes = figure.subplots()
        families = [f for f in table["family"].unique() if f != "macro"]
        for number, family in enumerate(families):
            part = table[table["family"] == family]
            axes.plot(
                part["examples"],
                part["f1"],
                linewidth=1,
                markersize=4,
                alpha=0.9,
                label=family,
                **family_style(number),
            )
        mean = table[table["family"] == "macro"]
        axes.plot(
            mean["examples"], mean["f1"], color="#22303c", linewidth=3, label="mean"
        )
        axes.set_ylim(min(0.5, float(np.floor(10 * table["f1"].min()) / 10)), 1.02)
        axes.set_xlabel("examples trained on")
        axes.set_ylabel("F1, blocks of time not trained on")
        axes.legend(frameon=False, fontsize=7, loc="lower right")
        axes.grid(alpha=0.25)
        return _png(figure)


def importance_picture(table: pd.DataFrame, rows: int = 15) -> str:
    """Draw the votes lost when a feature, or a group of them, is shuffled."""
    single = table[table["kind"] == "feature"].head(rows)
    groups = table[table["kind"] == "group"].head(rows)
    parts = [("one feature", single), ("a group together", groups)]
    parts = [(n, p) for n, p in parts if len(p)]
    height = 0.9 + 0.26 * max((len(p) for _, p in parts), default=1)
    with mpl.rc_context(_STYLE):
        figure = Figure(figsize=(11, height), layout="constrained")
        drawn = figure.subplots(1, len(parts), squeeze=False)[0]
        for axes, (name, part) in zip(drawn, parts, strict=True):
            place = np.arange(len(part))[::-1]
            axes.barh(
                place,
                100 * part["loss"],
                xerr=100 * part["spread"],
                color="#56B4E9",
                edgecolor="#22303c",
                linewidth=0.5,
            )
            axes.set_yticks(place, part["name"], fontsize=8)
            axes.set_xlabel(f"votes for the label lost by shuffling {name} (%)")
            axes.grid(alpha=0.25, axis="x")
        return _png(figure)
