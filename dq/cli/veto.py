"""``dq veto``: vetoes chosen and costed again."""

from __future__ import annotations

import click

from dq.cli.arguments import dead_time_option
from dq.cli.verb import Verb


@click.command(
    "veto",
    cls=Verb,
    example="dq veto night-demo/night --max-dead-time 0.02",
    short_help="Choose and cost vetoes again, no data reread.",
)
@click.argument("directory", metavar="DIR")
@dead_time_option
def command(directory: str, max_dead_time: float | None) -> int:
    """Choose and cost the vetoes of the finished night in DIR again."""
    from dq.cli.outcome import print_vetoes
    from dq.cli.progress import log_to_stderr
    from dq.night import veto_again

    with log_to_stderr():
        verdict = veto_again(directory, max_dead_time=max_dead_time)
    print_vetoes(verdict.cost)
    return 0
