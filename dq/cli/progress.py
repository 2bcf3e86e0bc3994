"""How far the work is: a bar on a terminal, plain log lines elsewhere, on stderr."""

from __future__ import annotations

import logging
import sys
from collections.abc import Iterator
from contextlib import contextmanager


class _StderrLines(logging.Handler):
    """Log lines on stderr that do not tear a progress bar."""

    def emit(self, record: logging.LogRecord) -> None:
        """Write one line; a closed stderr is not worth a failure."""
        line = f"dq: {' '.join(self.format(record).split())}"
        try:
            if sys.stderr.isatty():
                from tqdm import tqdm

                tqdm.write(line, file=sys.stderr)
            else:
                print(line, file=sys.stderr, flush=True)
        except OSError:
            return


@contextmanager
def log_to_stderr(level: int = logging.INFO) -> Iterator[None]:
    """Show the package's log lines on stderr while the block runs."""
    logger = logging.getLogger("dq")
    handler = _StderrLines()
    handler.setFormatter(logging.Formatter("%(message)s"))
    before = logger.level
    logger.addHandler(handler)
    logger.setLevel(level)
    try:
        yield
    finally:
        logger.removeHandler(handler)
        logger.setLevel(before)


class Bar:
    """Progress over a known number of steps; ``Bar(text)(done, total)``.

    On a terminal a bar is drawn; elsewhere a line is printed at every tenth of the
    work, so a log file of a night with thousands of channels stays short.
    """

    def __init__(self, text: str):
        self._text = text
        self._bar = None
        self._shown = -1

    def __call__(self, done: int, total: int, what: str = "") -> None:
        """Tell that ``done`` of ``total`` steps are finished."""
        if sys.stderr.isatty():
            self._draw(done, total, what)
        else:
            self._print(done, total)

    def _draw(self, done: int, total: int, what: str) -> None:
        from tqdm import tqdm

        if self._bar is None:
            self._bar = tqdm(
                total=total, desc=self._text, file=sys.stderr, leave=False, ncols=80
            )
        self._bar.set_postfix_str(what, refresh=False)
        self._bar.update(done - self._bar.n)
        if done >= total:
            self._bar.close()
            self._bar = None

    def _print(self, done: int, total: int) -> None:
        tenth = 10 * done // max(total, 1)
        if tenth != self._shown:
            self._shown = tenth
            logging.getLogger("dq").info("%s: %d of %d", self._text, done, total)
