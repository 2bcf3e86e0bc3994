"""``dq report``: the page again."""

from __future__ import annotations

import click

from dq.cli.verb import Verb


@click.command(
    "report",
    cls=Verb,
    example="dq report night-demo/night",
    short_help="The page again from the tables.",
)
@click.argument("directory", metavar="DIR")
def command(directory: str) -> int:
    """Write DIR/index.html again from the tables in DIR."""
    from dq.night import report_again

    click.echo(str(report_again(directory)))
    return 0
