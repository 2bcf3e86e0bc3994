"""What a person reads on the terminal when a verb is done."""

from __future__ import annotations

from typing import TYPE_CHECKING

import click

if TYPE_CHECKING:
    from dq.night import NightOutcome
    from dq.night.judge import Verdict
    from dq.night.train import Training

#: Lines that the list of what was left out may take; the files hold the rest.
_LISTED = 20

#: Said wherever a user decides about vetoes.
CAUTION = (
    "A veto can delete a discovery: look at what it removes before a search uses it. "
    "The collaboration's own review has the last word."
)


def print_night(outcome: NightOutcome) -> None:
    """Print how a night went, what was left out, and where the page is."""
    if outcome.nothing_to_do:
        click.echo(f"nothing to do: {outcome.directory} holds this very night")
    else:
        import json

        text = (outcome.directory / "summary.json").read_text(encoding="utf-8")
        click.echo("\n".join(_night_lines(json.loads(text))))
    _print_left_out(outcome)
    click.echo(f"page: {outcome.directory / 'index.html'}")


def _night_lines(summary: dict) -> list[str]:
    dead = summary["dead_time_fraction"] or 0.0
    efficiency = summary["efficiency"]["all"]
    removed = "" if efficiency is None else f", remove {100 * efficiency:.1f} %"
    return [
        f"analysed {summary['analysed_s']:.1f} s of {summary['requested_s']:.1f} s "
        f"asked for; {summary['strain_transients']} strain transients",
        f"vetoes {len(summary['vetoes'])}: take {100 * dead:.2f} % of the analysed "
        f"time{removed} of the transients",
        *summary["volume_time_ratio"].get("words", []),
        *(summary.get("test_signals") or {}).get("words", []),
    ]


def _print_left_out(outcome: NightOutcome) -> None:
    lines = [f"left out: {name}: {text}" for name, text in outcome.left_out.items()]
    lines += [
        f"faults: {name}: {seconds:.3f} s of ready time cannot be used"
        for name, seconds in outcome.faulty.items()
    ]
    for line in lines[:_LISTED]:
        click.echo(line)
    if len(lines) > _LISTED:
        click.echo(f"and {len(lines) - _LISTED} more, see channels.csv")


def print_vetoes(verdict: Verdict) -> None:
    """Print what each veto costs and removes, and what all bring to a search."""
    from dq.cost import actuated_words, losing_vetoes, volume_sentence

    heads = ("veto", "category", "dead time", "removes", "held out", "use fraction")
    rows = [(*heads, "only by it", "signals lost", "volume x time")]
    for row in verdict.cost.itertuples():
        rows.append(
            (
                str(row.veto),
                _cell(row.category, "{:d}"),
                _cell(row.dead_time_s, "{:.3f} s"),
                _cell(row.efficiency, "{:.2%}"),
                _interval(row.held_out_low, row.held_out_high),
                _cell(row.use_fraction, "{:.2%}"),
                _cell(row.unique_removed, "{:d}"),
                _cell(row.signal_loss, "{:.2%}"),
                _cell(row.volume_time_ratio, "{:.3f}"),
            )
        )
    click.echo(align(rows))
    choice = verdict.choice
    if choice.gain == choice.gain:
        click.echo(
            f"choice: {choice.gain:.2%} of the transients' worth; no choice within the "
            f"budget removes more than {choice.bound:.2%}"
        )
    click.echo(volume_sentence(verdict.volume))
    for line in [*losing_vetoes(verdict.cost), *actuated_words(verdict.cost)]:
        click.echo(line)
    click.echo(CAUTION)


def _cell(value, text: str) -> str:
    import pandas as pd

    return "-" if pd.isna(value) else text.format(value)


def _interval(low, high) -> str:
    import pandas as pd

    if pd.isna(low):
        return "-"
    return f"{100 * low:.1f}-{100 * high:.1f} %"


def align(rows: list[tuple[str, ...]]) -> str:
    """Set rows of cells in columns, the first left-aligned, the others right."""
    widths = [max(len(row[i]) for row in rows) for i in range(len(rows[0]))]
    lines = []
    for row in rows:
        cells = [row[0].ljust(widths[0])]
        cells += [c.rjust(w) for c, w in zip(row[1:], widths[1:], strict=True)]
        lines.append("  ".join(cells).rstrip())
    return "\n".join(lines)


def print_training(done: Training) -> None:
    """Print how good the sorter is, family by family, and where the report lies."""
    figures, guard = done.report.figures, done.report.guard
    rows = [("family", "examples", "precision", "recall", "F1")]
    for row in done.report.families.itertuples():
        scores = (f"{v:.3f}" for v in (row.precision, row.recall, row.f1))
        rows.append((row.family, str(row.examples), *scores))
    click.echo(align(rows))
    click.echo(
        f"macro-F1 {figures['macro_f1']:.3f}, calibration error "
        f"{figures['calibration_error']:.3f}, sets cover {figures['coverage']:.1%} "
        f"with {figures['mean_set_size']:.2f} families, declined "
        f"{figures['declined']:.1%}; all on time not trained on, the "
        f"{figures['contradicted']} labels that are most likely wrong among it"
    )
    if guard["examples"]:
        click.echo(
            f"chirp_like: {guard['missed']} of {guard['examples']} put into a noise "
            f"family (at most {guard['high']:.1%} with 95 % confidence)"
        )
    for note in done.notes:
        click.echo(f"note: {note}")
    click.echo(f"model: {done.model}")
    click.echo(f"page: {done.folder / 'index.html'}")
