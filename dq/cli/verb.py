"""What every verb's command has in common: an example and ``--debug``."""

from __future__ import annotations

from typing import Any

import click


def _set_debug(ctx: click.Context, _: click.Parameter, value: bool) -> None:
    if value and ctx.find_root().obj is not None:
        ctx.find_root().obj["debug"] = True


def debug_option() -> click.Option:
    """Give the option ``--debug``, which stands before or after the verb."""
    return click.Option(
        ["--debug"],
        is_flag=True,
        is_eager=True,
        expose_value=False,
        callback=_set_debug,
        help="Show the traceback of an error.",
    )


class Verb(click.Command):
    """A command whose help ends with a line that runs as it stands.

    Parameters
    ----------
    example : str
        The runnable example.
    """

    def __init__(self, *args: Any, example: str, **kwargs: Any):
        super().__init__(*args, **kwargs)
        self.example = example
        self.params.append(debug_option())

    def format_epilog(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        """Write the example, unwrapped so that it can be copied."""
        with formatter.section("Example"):
            formatter.write(f"{' ' * formatter.current_indent}{self.example}\n")
