"""``dq demo``: the invented site's night, made and worked through."""

from __future__ import annotations

from typing import TYPE_CHECKING

import click

from dq.cli.arguments import jobs_option
from dq.cli.verb import Verb

if TYPE_CHECKING:
    from pathlib import Path


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
    from dq.observatory import SiteSettings, make_site

    began = time.perf_counter()
    base = Path(directory)
    _check_folder(base)
    site = SiteSettings()
    config = base / "site" / "dq.toml"
    with log_to_stderr():
        # the configuration is the last file of a site: where it is, the site is whole
        if not config.exists():
            make_site(base / "site", settings=site, progress=Bar("making the site"))
        made = time.perf_counter() - began
        outcome = run_night(
            load_config(config),
            start=site.start,
            end=site.start + site.duration_s,
            out=base / "night",
            jobs=jobs,
            progress=Bar("channels"),
        )
    print_night(outcome)
    stages = {"site": made, **outcome.seconds}
    parts = ", ".join(f"{name} {seconds:.1f} s" for name, seconds in stages.items())
    click.echo(f"time: {time.perf_counter() - began:.1f} s ({parts})")
    return outcome.exit_code


def _check_folder(base: Path) -> None:
    from dq.errors import InputError

    if base.exists() and not base.is_dir():
        raise InputError(f"{str(base)!r} is a file; give a folder")
    strange = (
        sorted({p.name for p in base.iterdir()} - {"site", "night"})
        if base.exists()
        else []
    )
    if strange:
        raise InputError(
            f"{str(base)!r} holds {strange[0]!r} and no demo; choose an empty or new "
            "folder"
        )
