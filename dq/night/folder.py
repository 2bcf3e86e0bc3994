"""The output folder: whose it is, who works in it, and what it remembers.

Nothing is created for a command that turns out to be wrong: a folder that this run
made is removed again, and so are the state files that it added.
"""

from __future__ import annotations

import contextlib
import errno
import fcntl
import json
import logging
import os
import re
import time
from pathlib import Path
from types import TracebackType

from dq.errors import BusyError, InputError, OutputError
from dq.writers import write_atomically

MANIFEST = "manifest.json"
LOCK = "lock"
STATE = "state"
LOG = "run.log"

#: What a night that was killed early may have left.
_EARLY = {LOCK, STATE, LOG, MANIFEST}

#: A file that was being written when a run was killed, to be renamed when whole.
_HALF = re.compile(r"\..+\.(csv|h5|html|json|txt)\.\w{8}")

#: Error numbers of a full disk or a file system that went away.
LOST = {errno.ENOSPC, errno.EDQUOT, errno.ESTALE, errno.ENOTCONN, errno.EROFS}


class NightFolder:
    """An output folder held by this process alone; use as a context manager.

    Parameters
    ----------
    path : Path
        Need not exist.

    Raises
    ------
    BusyError
        Another process holds it.
    InputError
        It holds something that is no night, is a file, or cannot be created.
    OutputError
        The file system is full or lost.
    """

    def __init__(self, path: str | Path):
        self.path = Path(path)
        self._made: list[Path] = []
        self._lock: int | None = None
        self._log: _RunLog | None = None
        self._new_states: set[Path] = set()

    def __enter__(self) -> NightFolder:
        check_folder(self.path)
        try:
            self._make(self.path)
            self._hold()
        except OSError as error:
            self.undo()
            if error.errno in LOST - {errno.EROFS}:
                raise OutputError(
                    f"cannot write to {str(self.path)!r}: {error.strerror}; free some "
                    "space and run the same command"
                ) from error
            raise InputError(
                f"cannot make the output folder {str(self.path)!r}: {error.strerror}; "
                "choose another --out"
            ) from error
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        if self._log is not None:
            logging.getLogger("dq").removeHandler(self._log)
            self._log.close()
        if isinstance(error, InputError) and self._log is None:
            self.undo()
        if self._lock is not None:
            os.close(self._lock)

    @property
    def state(self) -> Path:
        """The folder of state files, made when first used."""
        path = self.path / STATE
        if not path.exists():
            self._make(path)
        return path

    def will_write(self, path: Path) -> None:
        """Remember a state file that this run adds, for :meth:`undo`."""
        self._new_states.add(path)

    def start_log(self) -> None:
        """Keep the package's log lines in ``run.log`` from now on.

        From here on the run counts as begun: nothing is undone.
        """
        self._log = _RunLog(self.path / LOG)
        logging.getLogger("dq").addHandler(self._log)

    def manifest(self) -> dict:
        """Give the manifest, or an empty dict when there is none yet."""
        return read_manifest(self.path) if (self.path / MANIFEST).exists() else {}

    def write_manifest(self, content: dict) -> None:
        """Replace the manifest."""
        write_manifest(self.path, content)

    def undo(self) -> None:
        """Remove what this run has made so far."""
        for path in self._new_states:
            path.unlink(missing_ok=True)
        if self._made:
            (self.path / LOCK).unlink(missing_ok=True)
        for path in reversed(self._made):
            try:
                path.rmdir()
            except OSError:
                break
        self._made.clear()

    def _make(self, path: Path) -> None:
        missing = [p for p in (path, *path.parents) if not p.exists()]
        for folder in reversed(missing):
            folder.mkdir(exist_ok=True)
            self._made.append(folder)

    def _hold(self) -> None:
        self._lock = os.open(self.path / LOCK, os.O_RDWR | os.O_CREAT, 0o644)
        try:
            fcntl.flock(self._lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError as error:
            self._made.clear()
            raise BusyError(
                f"another run works in {str(self.path)!r}; wait for it to end or "
                "choose another --out"
            ) from error
        for folder in (self.path, self.path / STATE, self.path / "segments"):
            for half in folder.glob(".*"):
                if _HALF.fullmatch(half.name):
                    half.unlink()


class _RunLog(logging.Handler):
    """Appends log lines to a file; a full disk is an error, not a lost line."""

    def __init__(self, path: Path):
        super().__init__()
        try:
            self._file = path.open("a", encoding="utf-8")
        except OSError as error:
            raise OutputError(
                f"cannot write {str(path)!r}: {error.strerror}"
            ) from error

    def emit(self, record: logging.LogRecord) -> None:
        """Write one line with its UTC time."""
        stamp = time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime(record.created))
        try:
            self._file.write(f"{stamp} {record.levelname} {record.getMessage()}\n")
            self._file.flush()
        except OSError as error:
            raise OutputError(
                f"cannot write {self._file.name!r}: {error.strerror}; free some space "
                "and run the same command"
            ) from error

    def close(self) -> None:
        """Close the file."""
        with contextlib.suppress(OSError):
            self._file.close()
        super().close()


def check_folder(path: Path) -> None:
    """Refuse a folder that holds something other than a night.

    Raises
    ------
    InputError
    """
    if not path.exists():
        if path.is_symlink():
            raise InputError(f"{str(path)!r} is a broken link; choose another --out")
        return
    if not path.is_dir():
        raise InputError(f"{str(path)!r} is a file, not a folder; choose another --out")
    try:
        names = {entry.name for entry in path.iterdir()}
    except OSError as error:
        raise InputError(f"cannot read {str(path)!r}: {error.strerror}") from error
    if MANIFEST in names:
        read_manifest(path)
        return
    strange = sorted(n for n in names - _EARLY if not _HALF.fullmatch(n))
    if strange:
        raise InputError(
            f"{str(path)!r} holds {strange[0]!r} and no night; choose an empty or new "
            "folder"
        )


def read_manifest(path: Path) -> dict:
    """Read the manifest of a night's folder.

    Raises
    ------
    InputError
        There is none, or it is not one of ours.
    """
    try:
        content = json.loads((path / MANIFEST).read_text(encoding="utf-8"))
    except FileNotFoundError as error:
        raise InputError(
            f"{str(path)!r} holds no {MANIFEST}; give the --out folder of a night"
        ) from error
    except NotADirectoryError as error:
        raise InputError(f"{str(path)!r} is not a folder; give a night's") from error
    except (OSError, ValueError) as error:
        raise InputError(f"cannot read {MANIFEST} in {str(path)!r}: {error}") from error
    if not isinstance(content, dict) or content.get("tool") != "dq":
        raise InputError(
            f"{MANIFEST} in {str(path)!r} was not written by dq; choose another folder"
        )
    return content


def write_manifest(path: Path, content: dict) -> None:
    """Replace the manifest of a night's folder, whole or not at all."""
    text = json.dumps(content, indent=1, sort_keys=True) + "\n"
    write_atomically(path / MANIFEST, text)
