"""The tables of one night's folder, read for people."""

from __future__ import annotations

import json
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
    VETOES,
    WITNESSES,
    Column,
    csv_table,
)

_TABLES: dict[str, tuple[str, tuple[Column, ...]]] = {
    "strain": ("strain_transients.csv", STRAIN_TRANSIENTS),
    "witnesses": ("witnesses.csv", WITNESSES),
    "vetoes": ("vetoes.csv", VETOES),
    "cost": ("veto_cost.csv", VETO_COST),
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
    strain, witnesses, vetoes, cost, channels, coverage : pandas.DataFrame
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


def read_night(directory: str | Path) -> NightTables:
    """Read a night's folder.

    Raises
    ------
    InputError
        It is no folder of a night, or a table is missing or damaged.
    """
    directory = Path(directory)
    manifest = _json(directory, "manifest.json")
    summary = _json(directory, "summary.json")
    tables = {key: _table(directory, *spec) for key, spec in _TABLES.items()}
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
            **tables,
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


def _table(directory: Path, name: str, columns: tuple[Column, ...]) -> pd.DataFrame:
    try:
        table = csv_table((directory / name).read_text(encoding="utf-8"), columns)
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(
            f"cannot read {str(directory / name)!r}: {error}; run the night again"
        ) from error
    # people read an empty text as empty, not as a missing value
    texts = {c.name: table[c.name].fillna("") for c in columns if c.kind == "text"}
    return table.assign(**texts)
