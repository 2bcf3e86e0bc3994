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
@click.option(
    "--search-triggers",
    "triggers",
    default=None,
    metavar="CSV",
    help="Your search's triggers (gps_time, snr): what the vetoes bring is told for "
    "them.  [default: the strain's transients]",
)
def command(directory: str, max_dead_time: float | None, triggers: str | None) -> int:
    """Choose and cost the vetoes of the finished night in DIR again."""
    from pathlib import Path

    from dq.cli.outcome import print_vetoes
    from dq.cli.progress import log_to_stderr
    from dq.night import veto_again
    from dq.night.honest import Search
    from dq.store import read_triggers

    search = None
    if triggers is not None:
        search = Search(
            f"triggers of {Path(triggers).name}", read_triggers(Path(triggers))
        )
    with log_to_stderr():
        verdict = veto_again(directory, max_dead_time=max_dead_time, search=search)
    print_vetoes(verdict)
    return 0
