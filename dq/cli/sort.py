"""``dq sort``: families for a table of transients."""

from __future__ import annotations

import click

from dq.cli.verb import Verb


@click.command(
    "sort",
    cls=Verb,
    example="dq sort night-demo/site/dq.toml night-demo/night/strain_transients.csv "
    "--model families.skops",
    short_help="Families for a table of strain transients, as CSV on stdout.",
)
@click.argument("config")
@click.argument("transients")
@click.option(
    "--model",
    required=True,
    metavar="FILE",
    help="Family model, as dq train writes it.",
)
@click.option(
    "--out",
    default=None,
    metavar="FILE",
    help="Write to FILE, .csv, instead of stdout.",
)
def command(config: str, transients: str, model: str, out: str | None) -> int:
    """Sort the strain's TRANSIENTS (.csv or .h5, as dq find writes them) into families.

    The strain's data around each transient are read again. Exit code 3: some
    transients could not be measured and stay unsorted; the log lines on stderr name
    them and the reason.
    """
    from pathlib import Path

    from dq.cli.progress import log_to_stderr
    from dq.config import load_config
    from dq.errors import InputError
    from dq.night.find import check_target
    from dq.night.sorting import read_transients, sort_table
    from dq.tables import STRAIN_TRANSIENTS, csv_text

    if out is not None:
        check_target(Path(out))
        if Path(out).suffix != ".csv":
            raise InputError(f"--out {out!r} must end in .csv")
    settings = load_config(config)
    table = read_transients(Path(transients), settings.site.strain)
    with log_to_stderr():
        found, left_out = sort_table(settings, table, model=Path(model))
    if out is not None:
        from dq.writers import write_table

        write_table(Path(out), found, STRAIN_TRANSIENTS)
    else:
        click.echo(csv_text(found, STRAIN_TRANSIENTS), nl=False)
    return 3 if left_out else 0
