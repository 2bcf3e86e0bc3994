"""The channel list: which channels there are, their role, safety and band."""

from __future__ import annotations

import csv
import re
from dataclasses import dataclass
from pathlib import Path

from dq.errors import InputError

NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9:_.\-]{0,254}")

_KNOWN = (
    "channel",
    "role",
    "sample_rate",
    "safe",
    "f_low_hz",
    "f_high_hz",
    "quantity",
    "unit",
    "description",
)


@dataclass(frozen=True)
class Channel:
    """One row of the channel list.

    Attributes
    ----------
    name : str
    role : str
        ``strain`` or ``auxiliary``.
    sample_rate, f_low_hz, f_high_hz : float or None
        Hz.
    safe : str
        ``yes``, ``no``, or empty: to be decided from injections.
    quantity, unit, description : str
    """

    name: str
    role: str
    sample_rate: float | None = None
    safe: str = ""
    f_low_hz: float | None = None
    f_high_hz: float | None = None
    quantity: str = ""
    unit: str = ""
    description: str = ""


def read_text(path: Path, what: str) -> str:
    """Read a small text file; a failure is one line that names it.

    Raises
    ------
    InputError
        The file cannot be read or is no UTF-8 text.
    """
    try:
        return Path(path).read_text(encoding="utf-8-sig")
    except OSError as error:
        raise InputError(
            f"cannot read {what} {str(path)!r}: {error.strerror}; check the path"
        ) from error
    except UnicodeDecodeError as error:
        raise InputError(
            f"{what} {str(path)!r} is no UTF-8 text (byte {error.start}); save it as "
            "plain text"
        ) from error


def check_name(name: str, where: str) -> str:
    """Refuse a channel name outside the allowed pattern, by name.

    Raises
    ------
    InputError
    """
    if not NAME.fullmatch(name):
        shown = name if len(name) < 60 else name[:57] + "..."
        raise InputError(
            f"{where}: channel name {shown!r} is not allowed; use letters, digits and "
            ": _ . - (first a letter or digit, at most 255)"
        )
    return name


def read_rows(path: Path, what: str, required: tuple[str, ...], known) -> list[dict]:
    """Read a CSV file with a header; give rows with their line number as ``line``.

    ``known`` lists the columns that may stand there; None: any.

    Raises
    ------
    InputError
        A required column is missing, a column is unknown or doubled, or a row has
        another number of cells than the header.
    """
    lines = read_text(path, what).splitlines()
    reader = csv.reader(lines)
    header = [cell.strip() for cell in next(reader, [])]
    missing = [c for c in required if c not in header]
    if missing:
        raise InputError(
            f"{what} {str(path)!r}: column {missing[0]!r} is missing; the header line "
            f"must hold {', '.join(required)}"
        )
    extra = [c for c in header if known is not None and c not in known]
    if extra:
        raise InputError(
            f"{what} {str(path)!r}: unknown column {extra[0]!r}; known are "
            f"{', '.join(known)}"
        )
    if len(set(header)) < len(header):
        raise InputError(f"{what} {str(path)!r}: a column stands twice in the header")
    rows = []
    for cells in reader:
        if not any(cell.strip() for cell in cells) or cells[0].startswith("#"):
            continue
        if len(cells) != len(header):
            raise InputError(
                f"{what} {str(path)!r} line {reader.line_num}: {len(cells)} cells "
                f"where the header has {len(header)}; quote cells that hold commas"
            )
        values = (cell.strip() for cell in cells)
        row = dict(zip(header, values, strict=True))
        rows.append({**row, "line": reader.line_num})
    return rows


def positive(row: dict, column: str, where: str) -> float | None:
    """Read an optional positive number of a row.

    Raises
    ------
    InputError
    """
    text = row.get(column, "")
    if not text:
        return None
    try:
        value = float(text)
    except ValueError:
        value = float("nan")
    if not 0 < value < 1e9:
        raise InputError(
            f"{where}: {column} = {text!r} must be a positive number; correct it or "
            "leave the cell empty"
        )
    return value


def read_channel_list(path: Path) -> list[Channel]:
    """Read ``channels.csv``.

    Parameters
    ----------
    path : Path

    Returns
    -------
    list of Channel
        In the order of the file.

    Raises
    ------
    InputError
        The message names the line, the value and what is allowed.
    """
    what = "channel list"
    channels, seen = [], {}
    for row in read_rows(path, what, ("channel", "role"), _KNOWN):
        where = f"{what} {str(path)!r} line {row['line']}"
        name = check_name(row["channel"], where)
        if name in seen:
            raise InputError(
                f"{where}: channel {name!r} stands already in line {seen[name]}; keep "
                "one"
            )
        seen[name] = row["line"]
        _one_of(row["role"], ("strain", "auxiliary"), "role", where)
        _one_of(row.get("safe", ""), ("yes", "no", ""), "safe", where)
        low, high = positive(row, "f_low_hz", where), positive(row, "f_high_hz", where)
        if low and high and high <= low:
            raise InputError(
                f"{where}: f_high_hz = {high:g} must be above f_low_hz = {low:g}"
            )
        channels.append(
            Channel(
                name=name,
                role=row["role"],
                sample_rate=positive(row, "sample_rate", where),
                safe=row.get("safe", ""),
                f_low_hz=low,
                f_high_hz=high,
                quantity=row.get("quantity", ""),
                unit=row.get("unit", ""),
                description=row.get("description", ""),
            )
        )
    if not channels:
        raise InputError(f"{what} {str(path)!r} lists no channel; add at least one")
    return channels


def _one_of(value: str, allowed: tuple[str, ...], column: str, where: str) -> None:
    if value not in allowed:
        names = ", ".join(a or "blank" for a in allowed)
        raise InputError(f"{where}: {column} = {value!r} must be one of {names}")
