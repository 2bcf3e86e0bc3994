"""``dq check``: what a night would meet."""

from __future__ import annotations

import click

from dq.cli.verb import Verb


@click.command(
    "check",
    cls=Verb,
    example="dq check night-demo/site/dq.toml",
    short_help="Say what is missing, odd or unusable, beforehand.",
)
@click.argument("config")
def command(config: str) -> int:
    """Read CONFIG, the channel list and all file headers, and say what they hold.

    Exit code 0: all usable; 3: something on the list is not; 2: no usable strain.
    """
    from dq.config import load_config
    from dq.night.check import check_inputs
    from dq.night.inputs import read_inputs

    found = check_inputs(read_inputs(load_config(config)))
    click.echo(found.text())
    return 3 if found.unusable else 0
