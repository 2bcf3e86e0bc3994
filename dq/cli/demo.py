"""``dq demo``: the invented site's night, made and worked through."""

from __future__ import annotations

import click

from dq.cli.arguments import jobs_option
from dq.cli.verb import Verb


@click.command(
    "demo",
    cls=Verb,
    example="dq demo night-demo",
    short_help="Make an invented night and run the job on it.",
)
@click.argument("directory", metavar="DIR")
@jobs_option
def command(directory: str, jobs: int | None) -> int:
    """Make the invented site's night in DIR/site and run the job into DIR/night.

    The site holds a dead channel and faults on purpose, so the exit code is 3: done,
    and what was left out is listed.
    """
    import time
    from pathlib import Path

    from dq.cli.outcome import print_night
    from dq.cli.progress import Bar, log_to_stderr
    from dq.config import load_config
    from dq.night import run_night
    from dq.night.demo import demo_range, demo_site

    began = time.perf_counter()
    with log_to_stderr():
        config_path = demo_site(Path(directory), progress=Bar("making the site"))
        made = time.perf_counter() - began
        start, end = demo_range(config_path)
        outcome = run_night(
            load_config(config_path),
            start=start,
            end=end,
            out=Path(directory) / "night",
            jobs=jobs,
            progress=Bar("channels"),
        )
    print_night(outcome)
    stages = {"site": made, **outcome.seconds}
    total = time.perf_counter() - began
    parts = ", ".join(f"{name} {seconds:.1f} s" for name, seconds in stages.items())
    click.echo(f"time: {total:.1f} s ({parts})")
    return outcome.exit_code
