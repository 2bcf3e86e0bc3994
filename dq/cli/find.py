"""``dq find``: the transients of one channel."""

from __future__ import annotations

from decimal import Decimal

import click

from dq.cli.arguments import GPS, end_option, snr_option, start_option
from dq.cli.verb import Verb


@click.command(
    "find",
    cls=Verb,
    example="dq find night-demo/site/dq.toml OV-STRAIN "
    "--start 1420000100 --end 1420000700",
    short_help="Transients of one channel, as CSV on stdout.",
)
@click.argument("config")
@click.argument("channel")
@start_option
@end_option
@click.option(
    "--out",
    default=None,
    metavar="FILE",
    help="Write to FILE, .csv or .h5, instead of stdout.",
)
@snr_option
@click.option(
    "--picture",
    default=None,
    metavar="FILE",
    help="Draw the tile energies of the range, at most 64 s, to FILE, .png.",
)
@click.option(
    "--at",
    type=GPS,
    default=None,
    metavar="GPS",
    help="Draw the transient that is active at GPS, instead of the range.",
)
def command(
    config: str,
    channel: str,
    start: Decimal,
    end: Decimal,
    out: str | None,
    snr: float | None,
    picture: str | None,
    at: Decimal | None,
) -> int:
    """Find the transients of CHANNEL in [start, end).

    Exit code 3: a part of the ready time held faults or missing samples; the log lines
    on stderr name it.
    """
    from pathlib import Path

    from dq.cli.progress import log_to_stderr
    from dq.config import load_config
    from dq.night.find import check_target, find_in_channel, write_found

    target = None if out is None else Path(out)
    if target is not None:
        check_target(target)
    if at is not None and picture is None:
        raise click.UsageError("--at names the time of a picture; give --picture too")
    if picture is not None:
        from dq.night.picture import check_picture

        check_picture(Path(picture), start, end, at)

    with log_to_stderr():
        settings = load_config(config)
        result = find_in_channel(
            settings, channel, start=start, end=end, snr_threshold=snr
        )
    if picture is not None:
        from dq.night.picture import draw_found
        from dq.writers.atomic import write_atomically

        drawn = draw_found(settings, result, start=start, end=end, at=at)
        write_atomically(Path(picture), drawn)
    if target is not None:
        write_found(target, result)
    else:
        from dq.tables import TRANSIENTS, csv_text

        click.echo(csv_text(result.transients, TRANSIENTS), nl=False)
    return 3 if any(result.faults.values()) else 0
