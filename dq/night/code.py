"""Which code made a result: a kept result is used again by the same code only."""

from __future__ import annotations

import hashlib
from functools import cache
from pathlib import Path

import dq

#: What a channel's result depends on; everything else works from the results. All of
#: the night counts: a list of its files would be forgotten when one is added.
ENGINE = ("segments", "store", "conditioning", "tiles", "transients", "motion", "night")


@cache
def code_digest(*parts: str) -> str:
    """Give the sha256 of the source of some parts, or of the whole package.

    A version number alone would let a checkout that moved on take over what older code
    has found.

    Parameters
    ----------
    *parts : str
        Folders or files of the package; none means all of it.
    """
    root = Path(dq.__file__).parent
    wanted = [root / part for part in parts] or [root]
    files = {p for w in wanted for p in ([w] if w.is_file() else w.rglob("*.py"))}
    total = hashlib.sha256()
    for path in sorted(files):
        total.update(f"{path.relative_to(root).as_posix()}\n".encode())
        total.update(path.read_bytes())
    return total.hexdigest()
