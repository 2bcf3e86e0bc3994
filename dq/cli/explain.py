"""``dq explain``: what is known about one time."""

from __future__ import annotations

from decimal import Decimal

import click

from dq.cli.arguments import GPS, Bounded
from dq.cli.verb import Verb


@click.command(
    "explain",
    cls=Verb,
    example="dq explain night-demo/night 1420000100.25",
    short_help="One time: analysed, vetoed, by what, and why.",
)
@click.argument("directory", metavar="DIR")
@click.argument("gps", type=GPS)
@click.option(
    "--window",
    "window_s",
    type=Bounded(0.001, 3600.0),
    default=1.0,
    show_default=True,
    metavar="S",
    help="How near is near, seconds on both sides.",
)
def command(directory: str, gps: Decimal, window_s: float) -> int:
    """Tell what the night in DIR knows about the GPS time."""
    from pathlib import Path

    from dq.night.folder import read_manifest
    from dq.report import explain

    read_manifest(Path(directory))
    click.echo(explain(Path(directory), gps, window_s=window_s))
    return 0
