"""The frame of the command line: verbs in flow order, exit codes, one-line errors.

Exit codes: 0 done; 1 failed; 2 bad input or usage, nothing written; 3 done, but
channels or time were left out (listed); 130 interrupted from the keyboard.
"""

from __future__ import annotations

import os
import sys
from collections.abc import Sequence
from importlib import import_module

import click

from dq.cli.verb import debug_option
from dq.errors import DqError

#: The verbs in the order in which a night flows.
VERBS = (
    "demo",
    "check",
    "find",
    "train",
    "sort",
    "night",
    "veto",
    "explain",
    "report",
)

#: Exit code after Ctrl-C: 128 + the number of SIGINT, common practice.
INTERRUPTED = 130


class Verbs(click.Group):
    """A group that loads a verb's file only when the verb is asked for."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        """Give the verbs in flow order."""
        return list(VERBS)

    def get_command(self, ctx: click.Context, name: str) -> click.Command | None:
        """Import the verb's file and take its command."""
        if name not in VERBS:
            return None
        return import_module(f"dq.cli.{name}").command


def _show_version(ctx: click.Context, _: click.Parameter, value: bool) -> None:
    if value:
        from dq import __version__

        click.echo(f"dq {__version__}")
        ctx.exit()


@click.group(
    cls=Verbs,
    params=[
        debug_option(),
        click.Option(
            ["--version"],
            is_flag=True,
            is_eager=True,
            expose_value=False,
            callback=_show_version,
            help="Show the version and exit.",
        ),
    ],
    invoke_without_command=True,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 88},
    epilog="Exit codes: 0 done; 1 failed; 2 bad input or usage, nothing written; "
    "3 done, but channels or time were left out (listed). "
    "Try: dq demo night-demo",
)
@click.pass_context
def root(ctx: click.Context) -> None:
    """Judge the data quality of an interferometer's night.

    Finds the transients of the strain and of every auxiliary channel, names the
    channels that witnessed the strain's transients, and writes the veto segments with
    their cost in dead time.
    """
    if ctx.invoked_subcommand is None:
        click.echo(ctx.get_help())


def main(argv: Sequence[str] | None = None) -> int:
    """Run one command.

    Parameters
    ----------
    argv : sequence of str, optional
        Arguments after the program's name; by default those of the process.

    Returns
    -------
    int
        The exit code.
    """
    arguments = list(sys.argv[1:] if argv is None else argv)
    state = {"debug": False}
    try:
        # click's own main would turn Ctrl-C and a closed pipe into its own messages
        with root.make_context("dq", arguments, obj=state) as context:
            result = root.invoke(context)
        sys.stdout.flush()
    except BrokenPipeError:
        _silence_stdout()
        return 0
    except (KeyboardInterrupt, click.Abort):
        return _fail("interrupted; the same command resumes", INTERRUPTED, state)
    except click.exceptions.Exit as stop:
        return stop.exit_code
    except click.UsageError as error:
        return _fail(_usage_text(error), 2, state)
    except click.ClickException as error:
        return _fail(error.format_message(), 2, state)
    except DqError as error:
        return _fail(str(error), error.exit_code, state)
    except Exception as error:
        text = f"unexpected {type(error).__name__}: {error}; --debug shows where"
        return _fail(text, 1, state)
    return result if isinstance(result, int) else 0


def _usage_text(error: click.UsageError) -> str:
    path = error.ctx.command_path if error.ctx else "dq"
    return f"{error.format_message().rstrip('.')}; see '{path} --help'"


def _fail(text: str, code: int, state: dict) -> int:
    if state["debug"]:
        import traceback

        traceback.print_exc()
    print(f"dq: error: {' '.join(text.split())}", file=sys.stderr)
    return code


def _silence_stdout() -> None:
    # The interpreter flushes stdout once more on its way out; a closed pipe would
    # then print a traceback that nobody can act on.
    os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
