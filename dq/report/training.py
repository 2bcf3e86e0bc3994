"""The page of a training: how good the sorter is, and what to label next."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from dq.report.page import environment, percent

if TYPE_CHECKING:
    from dq.families.report import TrainingReport

#: Rows of the audit and of unmatched labels on the page; the files hold all.
_SHOWN = 25


def training_page(report: TrainingReport, *, site: str, notes: Sequence[str]) -> str:
    """Render the report of a training; equal tables give equal text.

    Parameters
    ----------
    report : dq.families.TrainingReport
    site : str
    notes : sequence of str
        What the reader should know first.

    Returns
    -------
    str
        One HTML page without outside parts.
    """
    from dq import __version__
    from dq.report import training_figures as figures

    reliability = report.reliability.rename(columns={"count": "count_"})
    return (
        environment()
        .get_template("training.html")
        .render(
            site=site,
            version=__version__,
            facts=_facts(report),
            sentences=_sentences(report),
            notes=notes,
            scores=figures.scores_picture(report.families),
            reliability=figures.reliability_picture(reliability),
            learning=figures.learning_picture(report.learning),
            importance=figures.importance_picture(report.importance),
            families=_families(report),
            confusion=_confusion(report.confusion),
            sets=_sets(report.sets),
            new=_new(report.new),
            agreement=_agreement(report.agreement),
            audit=_audit(report.audit),
            audited=len(report.audit),
            unmatched=_unmatched(report.unmatched),
            left=len(report.unmatched),
        )
    )


def _facts(report: TrainingReport) -> list[tuple[str, str, str]]:
    f, guard = report.figures, report.guard
    facts = [
        (f"{f['macro_f1']:.3f}", "macro-F1", f"mean over {f['families']} families"),
        (
            f"{f['calibration_error']:.3f}",
            "calibration error",
            f"Brier score {f['brier']:.3f}",
        ),
        (
            percent(f["coverage"]),
            "covered by the sets",
            f"{f['mean_set_size']:.2f} families in a set; {f['contradicted']} labels "
            "are most likely wrong",
        ),
        (percent(f["declined"]), "called unknown", "of examples of known families"),
    ]
    if guard["examples"]:
        facts.append(
            (
                percent(guard["miss_rate"], 2),
                "chirps called noise",
                f"{guard['missed']} of {guard['examples']}; at most "
                f"{percent(guard['high'], 2)}",
            )
        )
    return facts


def _sentences(report: TrainingReport) -> list[str]:
    f = report.figures
    out = [
        f"{f['examples']} examples; every figure is measured on blocks of time that "
        "the model judging them was not trained on."
    ]
    curve = report.learning
    shares = sorted(curve["share"].unique())
    if len(shares) >= 2:
        last = curve[curve["share"] == shares[-1]].set_index("family")["f1"]
        before = curve[curve["share"] == shares[-2]].set_index("family")["f1"]
        gain = (last - before).drop("macro").sort_values(ascending=False)
        rising = [f for f in gain.index if gain[f] > 0.01 and last[f] < 0.95]
        if rising:
            out.append(
                f"More labels would help most with {', '.join(rising[:3])}: their F1 "
                f"still rises and is below 0.95."
            )
        else:
            out.append(
                "The learning curve is flat at its end or above 0.95 for every family: "
                "more labels of the same kind would change little."
            )
    if len(report.new):
        total = report.new["declined"].sum() / report.new["examples"].sum()
        out.append(
            f"Trained without one of the families, the sorter calls {percent(total)} "
            "of its examples unknown; a new kind of noise fares about so."
        )
    return out


def _interval(low: float, high: float) -> str:
    return f"{low:.3f} – {high:.3f}"


def _number(value: float, digits: int = 3) -> str:
    return "–" if pd.isna(value) else f"{value:.{digits}f}"


def _families(report: TrainingReport) -> list[dict]:
    return [
        {
            "family": r.family,
            "examples": r.examples,
            "blocks": r.blocks,
            "sorted": r.sorted,
            "right": r.right,
            "precision": _number(r.precision),
            "precision_range": _interval(r.precision_low, r.precision_high),
            "recall": _number(r.recall),
            "recall_range": _interval(r.recall_low, r.recall_high),
            "f1": _number(r.f1),
            "f1_range": _interval(r.f1_low, r.f1_high),
        }
        for r in report.families.itertuples()
    ]


def _confusion(table: pd.DataFrame) -> dict:
    shares = table.div(np.maximum(table.sum(axis=1), 1), axis=0)
    rows = []
    for name in table.index:
        cells = [
            {
                "count": int(table.loc[name, c]),
                "share": float(shares.loc[name, c]),
                "own": c == name,
            }
            for c in table.columns
        ]
        rows.append({"family": name, "cells": cells})
    return {"columns": list(table.columns), "rows": rows}


def _sets(table: pd.DataFrame) -> list[dict]:
    return [
        {
            "family": r.family,
            "examples": r.examples,
            "coverage": percent(r.coverage),
            "range": f"{percent(r.coverage_low)} – {percent(r.coverage_high)}",
            "p": f"{r.p_value:.2g}",
            "size": f"{r.mean_size:.2f}",
            "empty": r.empty,
            "contradicted": r.contradicted,
        }
        for r in table.itertuples()
    ]


def _new(table: pd.DataFrame) -> list[dict]:
    return [
        {
            "family": r.family,
            "declined": f"{r.declined} of {r.examples}",
            "share": percent(r.share),
            "range": f"{percent(r.low)} – {percent(r.high)}",
            "known": percent(r.known_declined),
        }
        for r in table.itertuples()
    ]


def _agreement(table: pd.DataFrame) -> list[dict]:
    return [
        {
            "pair": f"{r.first} and {r.second}",
            "both": r.both,
            "agreed": r.agreed,
            "kappa": _number(r.kappa),
        }
        for r in table.itertuples()
    ]


def _audit(table: pd.DataFrame) -> list[dict]:
    return [
        {
            "gps": "simulated" if pd.isna(r.gps_time) else f"{r.gps_time:.3f}",
            "label": r.label,
            "suggested": r.suggested,
            "own": _number(r.label_probability),
            "other": _number(r.suggested_probability),
        }
        for r in table.head(_SHOWN).itertuples()
    ]


def _unmatched(table: pd.DataFrame) -> list[dict]:
    return [
        {
            "gps": f"{r.gps_time:.3f}",
            "family": r.family,
            "labeller": r.labeller,
            "reason": r.reason,
        }
        for r in table.head(_SHOWN).itertuples()
    ]
