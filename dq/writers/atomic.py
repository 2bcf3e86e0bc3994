"""Files written beside and renamed: a reader sees the old or the new one, whole."""

from __future__ import annotations

import contextlib
import os
import tempfile
from pathlib import Path

from dq.errors import OutputError


def write_atomically(path: str | Path, data: str | bytes) -> None:
    """Write a file beside its place, flush it to the disk and rename it.

    Parameters
    ----------
    path : str or Path
    data : str or bytes
        Text is written as UTF-8 with its own line ends.

    Raises
    ------
    OutputError
        The disk is full or the folder cannot be written; the old file, if any, still
        stands and nothing half-written is left.
    """
    path = Path(path)
    content = data.encode() if isinstance(data, str) else data
    name = None
    try:
        handle, name = tempfile.mkstemp(prefix=f".{path.name}.", dir=path.parent)
        with os.fdopen(handle, "wb") as stream:
            stream.write(content)
            stream.flush()
            os.fsync(stream.fileno())
        os.chmod(name, 0o666 & ~_umask())
        os.replace(name, path)
    except OSError as error:
        if name is not None:
            with contextlib.suppress(OSError):
                os.unlink(name)
        raise OutputError(
            f"cannot write {str(path)!r}: {error.strerror}; free the disk or correct "
            "the folder and run the same command again"
        ) from error


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask


def write_table(path: str | Path, table, columns) -> None:
    """Write a table as CSV with the specification's columns and digits.

    Raises
    ------
    OutputError
    """
    from dq.tables import csv_text

    write_atomically(path, csv_text(table, columns))
