"""``dq night``: the nightly batch."""

from __future__ import annotations

from decimal import Decimal

import click

from dq.cli.arguments import end_option, jobs_option, start_option
from dq.cli.verb import Verb


@click.command(
    "night",
    cls=Verb,
    example="dq night night-demo/site/dq.toml "
    "--start 1420000037 --end 1420003637 --out night",
    short_help="The nightly batch: every stage, resumable.",
)
@click.argument("config")
@start_option
@end_option
@click.option(
    "--out", "out", required=True, metavar="DIR", help="Folder of the night's files."
)
@jobs_option
def command(
    config: str, start: Decimal, end: Decimal, out: str, jobs: int | None
) -> int:
    """Run every stage over every channel of CONFIG in [start, end).

    A run that was stopped resumes with the same command; a finished folder has nothing
    to do; with changed settings or inputs, what is affected is computed anew.
    """
    from dq.cli.outcome import print_night
    from dq.cli.progress import Bar, log_to_stderr
    from dq.config import load_config
    from dq.night import run_night

    with log_to_stderr():
        outcome = run_night(
            load_config(config),
            start=start,
            end=end,
            out=out,
            jobs=jobs,
            progress=Bar("channels"),
        )
    print_night(outcome)
    return outcome.exit_code
