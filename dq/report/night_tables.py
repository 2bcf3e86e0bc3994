"""The tables of one night's folder, read for people."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from dq.errors import InputError
from dq.segments import Segments, to_ns
from dq.tables import (
    COVERAGE,
    NIGHT_CHANNELS,
    STRAIN_TRANSIENTS,
    VETO_COST,
    VETO_CURVE,
    VETOES,
    WITNESSES,
    Column,
    csv_table,
    empty,
)

_TABLES: dict[str, tuple[str, tuple[Column, ...]]] = {
    "strain": ("strain_transients.csv", STRAIN_TRANSIENTS),
    "witnesses": ("witnesses.csv", WITNESSES),
    "vetoes": ("vetoes.csv", VETOES),
    "cost": ("veto_cost.csv", VETO_COST),
    "curve": ("veto_curve.csv", VETO_CURVE),
    "channels": ("channels.csv", NIGHT_CHANNELS),
    "coverage": ("coverage.csv", COVERAGE),
}


@dataclass(frozen=True)
class NightTables:
    """What a night's folder says.

    Attributes
    ----------
    directory : Path
    start_ns, end_ns : int
        Requested range.
    site, strain_name : str
    manifest, summary : dict
    strain, witnesses, vetoes, cost, curve, channels, coverage : pandas.DataFrame
    """

    directory: Path
    start_ns: int
    end_ns: int
    site: str
    strain_name: str
    manifest: dict
    summary: dict
    strain: pd.DataFrame
    witnesses: pd.DataFrame
    vetoes: pd.DataFrame
    cost: pd.DataFrame
    curve: pd.DataFrame
    channels: pd.DataFrame
    coverage: pd.DataFrame

    def time(self, kind: str, channel: str | None = None) -> Segments:
        """Give a channel's time of a kind of coverage; by default the strain's."""
        rows = self.coverage[
            (self.coverage["channel"] == (channel or self.strain_name))
            & (self.coverage["kind"] == kind)
        ]
        return segments_of(rows)

    def accepted(self) -> pd.DataFrame:
        """Give the accepted witnesses in their order."""
        return self.witnesses[self.witnesses["accepted"].fillna(False).astype(bool)]


def segments_of(rows: pd.DataFrame) -> Segments:
    """Give the segments of rows with ``gps_start`` and ``gps_end``."""
    return Segments(
        rows["gps_start"].to_numpy(np.int64), rows["gps_end"].to_numpy(np.int64)
    )


def read_night(
    directory: str | Path,
    *,
    tables: Iterable[str] | None = None,
    keep: Mapping[str, Callable] | None = None,
) -> NightTables:
    """Read a night's folder.

    Parameters
    ----------
    directory : str or Path
    tables : iterable of str, optional
        The tables that are needed, by attribute; the others stay empty. Default: all.
    keep : mapping of str to callable, optional
        By attribute, what :func:`dq.tables.csv_table` takes to keep some rows only.

    Raises
    ------
    InputError
        It is no folder of a night, or a table is missing or damaged.
    """
    directory = Path(directory)
    manifest = _json(directory, "manifest.json")
    summary = _json(directory, "summary.json")
    wanted = set(_TABLES if tables is None else tables)
    read = {
        key: _table(directory, *spec, keep=(keep or {}).get(key))
        if key in wanted
        else empty(spec[1])
        for key, spec in _TABLES.items()
    }
    try:
        site = manifest["config"]["site"]
        return NightTables(
            directory=directory,
            start_ns=to_ns(manifest["gps_start"]),
            end_ns=to_ns(manifest["gps_end"]),
            site=site["name"],
            strain_name=site["strain"],
            manifest=manifest,
            summary=summary,
            **read,
        )
    except (KeyError, TypeError) as error:
        raise InputError(
            f"{str(directory / 'manifest.json')!r} lacks {error}; run the night again"
        ) from error


def _json(directory: Path, name: str) -> dict:
    try:
        return json.loads((directory / name).read_text(encoding="utf-8"))
    except (OSError, ValueError) as error:
        raise InputError(
            f"{str(directory)!r} holds no finished night: cannot read {name} "
            f"({error}); run dq night"
        ) from error


def _table(
    directory: Path,
    name: str,
    columns: tuple[Column, ...],
    *,
    keep: Callable | None = None,
) -> pd.DataFrame:
    try:
        text = (directory / name).read_text(encoding="utf-8")
        table = csv_table(text, columns, keep=keep)
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(
            f"cannot read {str(directory / name)!r}: {error}; run the night again"
        ) from error
    # people read an empty text as empty, not as a missing value
    texts = {c.name: table[c.name].fillna("") for c in columns if c.kind == "text"}
    return table.assign(**texts)
