"""Argument types and options that several verbs share."""

from __future__ import annotations

import math
from decimal import Decimal, InvalidOperation

import click


class GpsTime(click.ParamType):
    """A GPS time in decimal seconds, kept exact as a ``decimal.Decimal``."""

    name = "gps"

    def convert(
        self, value: object, param: click.Parameter | None, ctx: click.Context | None
    ) -> Decimal:
        """Read the text; more than nine decimals are refused, not rounded."""
        try:
            seconds = Decimal(str(value))
        except InvalidOperation:
            self.fail(f"{value!r} is no GPS time in seconds such as 1400000000.5")
        # 2**63 ns is GPS 9223372036.85; times before GPS 0 exist in no recording.
        if not seconds.is_finite() or not 0 <= seconds <= 9_223_372_036:
            self.fail(f"{value!r} must lie within 0..9223372036 GPS seconds")
        if seconds != round(seconds, 9):
            self.fail(f"{value!r} is finer than a nanosecond; give nine decimals")
        return seconds


class Bounded(click.FloatRange):
    """A number within closed bounds; unlike click's own, it refuses NaN."""

    def convert(
        self, value: object, param: click.Parameter | None, ctx: click.Context | None
    ) -> float:
        """Read the number."""
        number = float(super().convert(value, param, ctx))
        if math.isnan(number):
            self.fail(f"{value!r} is no number")
        return number


GPS = GpsTime()

start_option = click.option(
    "--start",
    "start",
    type=GPS,
    required=True,
    metavar="GPS",
    help="First GPS second of the range.",
)
end_option = click.option(
    "--end",
    "end",
    type=GPS,
    required=True,
    metavar="GPS",
    help="GPS second just past the range.",
)
jobs_option = click.option(
    "--jobs",
    type=click.IntRange(1, 1024),
    default=None,
    metavar="N",
    help="Channels worked on at a time.  [default: number of processors]",
)
snr_option = click.option(
    "--snr",
    type=Bounded(3.5, 1000.0),
    default=None,
    metavar="F",
    help="Threshold on the signal-to-noise ratio.  [default: the config's]",
)
dead_time_option = click.option(
    "--max-dead-time",
    type=Bounded(0.0, 1.0),
    default=None,
    metavar="F",
    help="Fraction of the analysed time that vetoes may take.  [default: the night's]",
)
