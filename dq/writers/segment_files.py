"""The folder of segment files that searches read."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd

from dq.errors import OutputError
from dq.segments import Segments, format_segments
from dq.writers.atomic import write_atomically

#: Names in the folder that no veto may take.
RESERVED = ("analysed", "all_vetoes", "category1", "category2", "category3")


def segments_of(rows: pd.DataFrame) -> Segments:
    """Give the segments of rows of ``dq.tables.VETOES``."""
    return Segments.from_arrays(
        rows["gps_start"].to_numpy(np.int64), rows["gps_end"].to_numpy(np.int64)
    )


def write_segments_folder(
    directory: str | Path, *, analysed: Segments, vetoes: pd.DataFrame
) -> list[Path]:
    """Write ``segments/``: analysed time, each veto, each category, all vetoes.

    Files of an earlier run that no longer belong are removed after the new ones stand.

    Parameters
    ----------
    directory : str or Path
        The night's folder.
    analysed : Segments
    vetoes : pandas.DataFrame
        ``dq.tables.VETOES``.

    Returns
    -------
    list of Path

    Raises
    ------
    OutputError
        A file cannot be written, or a veto takes a reserved name.
    """
    folder = Path(directory) / "segments"
    try:
        folder.mkdir(exist_ok=True)
    except OSError as error:
        raise OutputError(f"cannot make {str(folder)!r}: {error.strerror}") from error
    unjudged = "a time outside was not judged: it is neither clean nor vetoed"
    files = {
        "analysed": (analysed, f"analysed time, GPS seconds, half-open; {unjudged}"),
        "all_vetoes": (segments_of(vetoes), "all vetoes, GPS seconds, half-open"),
    }
    for category in (1, 2, 3):
        rows = vetoes[vetoes["category"] == category]
        header = f"vetoes of category {category}, GPS seconds, half-open"
        files[f"category{category}"] = (segments_of(rows), header)
    for name, rows in vetoes.groupby("veto", sort=False):
        if name in RESERVED:
            raise OutputError(f"veto {name!r} takes a reserved file name")
        files[str(name)] = (segments_of(rows), f"veto {name}, GPS seconds, half-open")
    paths = []
    for name, (segments, header) in files.items():
        path = folder / f"{name}.txt"
        write_atomically(path, format_segments(segments, header=header))
        paths.append(path)
    for path in folder.glob("*.txt"):
        if path not in paths:
            path.unlink()
    return paths
