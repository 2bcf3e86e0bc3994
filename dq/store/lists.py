"""The other small input files: ready segments and test signals."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

from dq.errors import InputError, SegmentError
from dq.segments import Segments, parse_segments, to_ns
from dq.store.channels import check_name, positive, read_rows, read_text

if TYPE_CHECKING:
    import pandas as pd


def read_ready(path: Path) -> Segments:
    """Read ready segments: two columns, ``#`` comments.

    Raises
    ------
    InputError
    """
    text = read_text(path, "ready segments")
    return parse_segments(text, where=f"ready segments {str(path)!r}")


def read_injections(path: Path) -> pd.DataFrame:
    """Read test signals actuated into the detector.

    Returns
    -------
    pandas.DataFrame
        Columns ``gps_time`` (s), ``kind`` (text), ``snr`` (NaN where not given).

    Raises
    ------
    InputError
    """
    import pandas as pd

    what = "injections"
    rows = read_rows(path, what, ("gps_time",), ("gps_time", "kind", "snr"))
    times, kinds, snrs = [], [], []
    for row in rows:
        where = f"{what} {str(path)!r} line {row['line']}"
        try:
            times.append(to_ns(row["gps_time"]) / 1e9)
        except SegmentError as error:
            raise InputError(f"{where}: {error}") from error
        kinds.append(row.get("kind", ""))
        snr = positive(row, "snr", where)
        snrs.append(float("nan") if snr is None else snr)
    return pd.DataFrame(
        {
            "gps_time": pd.Series(times, dtype="float64"),
            "kind": pd.Series(kinds, dtype="string"),
            "snr": pd.Series(snrs, dtype="float64"),
        }
    )


def read_triggers(path: Path) -> pd.DataFrame:
    """Read the triggers of a user's own search.

    Returns
    -------
    pandas.DataFrame
        Columns ``gps_time`` (s) and ``snr``, in the order of the file; what else the
        file holds is left alone.

    Raises
    ------
    InputError
        A column is absent, there is no trigger, or a value is no number.
    """
    import pandas as pd

    what = "search triggers"
    rows = read_rows(path, what, ("gps_time", "snr"), None)
    times, snrs = [], []
    for row in rows:
        where = f"{what} {str(path)!r} line {row['line']}"
        try:
            times.append(to_ns(row["gps_time"]) / 1e9)
        except SegmentError as error:
            raise InputError(f"{where}: {error}") from error
        snr = positive(row, "snr", where)
        if snr is None:
            raise InputError(f"{where}: snr is empty; give each trigger's")
        snrs.append(snr)
    if not rows:
        raise InputError(f"{what} {str(path)!r} holds no trigger; check the file")
    return pd.DataFrame({"gps_time": times, "snr": snrs}, dtype="float64")


#: Columns of a label list; the last two are optional.
LABEL_COLUMNS = ("gps_time", "channel", "family", "labeller", "comment", "confidence")


def read_labels(path: Path) -> pd.DataFrame:
    """Read hand labels.

    Returns
    -------
    pandas.DataFrame
        ``gps_time`` (s), ``channel, family, labeller, comment`` (text), ``confidence``
        (0..1, NaN where not given) and ``line`` (of the file).

    Raises
    ------
    InputError
        The file cannot be read, holds no label, or a cell is empty or out of bounds.
    """
    import pandas as pd

    what = "labels"
    rows = read_rows(path, what, LABEL_COLUMNS[:4], LABEL_COLUMNS)
    if not rows:
        raise InputError(f"{what} {str(path)!r} hold no label; add some")
    table = []
    for row in rows:
        where = f"{what} {str(path)!r} line {row['line']}"
        try:
            time = to_ns(row["gps_time"]) / 1e9
        except SegmentError as error:
            raise InputError(f"{where}: {error}") from error
        for column in ("family", "labeller"):
            if not row[column]:
                raise InputError(f"{where}: {column} is empty; fill it in")
        check_name(row["channel"], where)
        table.append(
            {
                "gps_time": time,
                "channel": row["channel"],
                "family": row["family"],
                "labeller": row["labeller"],
                "comment": row.get("comment", ""),
                "confidence": _confidence(row.get("confidence", ""), where),
                "line": row["line"],
            }
        )
    return pd.DataFrame(table)


def _confidence(text: str, where: str) -> float:
    if not text:
        return float("nan")
    try:
        value = float(text)
    except ValueError:
        value = -1.0
    if not 0.0 <= value <= 1.0:
        raise InputError(f"{where}: confidence = {text!r} must lie within 0..1")
    return value
