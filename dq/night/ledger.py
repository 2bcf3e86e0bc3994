"""Where every channel's time went: the night's own tables, built and read back.

``dq veto`` and ``dq report`` work from these tables alone, and so does the night after
its channels are done: there is one way from channels to vetoes, not two.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np
import pandas as pd

from dq.errors import InputError
from dq.features.registry import FEATURES
from dq.night.channel import ChannelResult
from dq.segments import Segments, to_ns_array
from dq.store import Channel
from dq.tables import (
    COVERAGE,
    INJECTIONS,
    NIGHT_CHANNELS,
    PLANTED,
    STRAIN_TRANSIENTS,
    Column,
    conform,
    csv_table,
)

CHANNELS_FILE = "channels.csv"
COVERAGE_FILE = "coverage.csv"
TRANSIENTS_FILE = "transients.h5"
STRAIN_FILE = "strain_transients.csv"
FEATURES_FILE = "strain_features.csv"

#: Columns of ``strain_features.csv``.
FEATURE_COLUMNS: tuple[Column, ...] = (
    Column("transient_id", "text", meaning="stable name of the transient"),
    *(Column(f.name, "float", f.unit, "%.6g", f.meaning) for f in FEATURES),
)

_FAMILY = ("family", "probability", "family_set", "novelty")

#: What the sorter says of a transient: columns of ``strain_transients.csv``.
FAMILY_COLUMNS = tuple(c for c in STRAIN_TRANSIENTS if c.name in _FAMILY)
PLANTED_FILE = "planted.csv"
INJECTIONS_FILE = "injections.csv"

_ACCOUNTED = ("analysed", "missing", "unjudged")


@dataclass(frozen=True)
class Ledger:
    """What the channels' stage hands to everything after it.

    Attributes
    ----------
    strain : str
        Name of the strain channel.
    transients : dict of str to pandas.DataFrame
        ``dq.tables.TRANSIENTS`` of every channel that was analysed.
    channels : pandas.DataFrame
        ``dq.tables.NIGHT_CHANNELS``.
    coverage : pandas.DataFrame
        ``dq.tables.COVERAGE``.
    features : pandas.DataFrame or None
        ``FEATURE_COLUMNS`` of the strain's transients, in their order; None where the
        night measures none.
    families : pandas.DataFrame or None
        ``FAMILY_COLUMNS``, likewise; None without a model.
    sorting : dict
        What the sorter says of the night: ``unknowns`` and ``drift`` in words, and the
        ``groups`` of unknown transients; empty without a model or when read back.
    injections : pandas.DataFrame or None
        ``dq.tables.INJECTIONS``; None where the configuration names no test signals.
    """

    strain: str
    transients: dict[str, pd.DataFrame]
    channels: pd.DataFrame
    coverage: pd.DataFrame
    features: pd.DataFrame | None = None
    families: pd.DataFrame | None = None
    sorting: dict = field(default_factory=dict)
    injections: pd.DataFrame | None = None

    @property
    def signals_ns(self) -> np.ndarray | None:
        """Times of the test signals, nanoseconds; None where none are listed."""
        if self.injections is None:
            return None
        return to_ns_array(self.injections["gps_time"].to_numpy(float))

    @property
    def sorted_strain(self) -> pd.DataFrame:
        """The strain's transients, with what the sorter said where it did."""
        table = self.transients[self.strain]
        if self.families is None:
            return table
        return table.assign(**{c: self.families[c].array for c in self.families})

    def time(self, kind: str) -> dict[str, Segments]:
        """Give the segments of one kind for every analysed channel."""
        rows = self.coverage[self.coverage["kind"] == kind]
        found = {
            str(name): Segments.from_arrays(
                group["gps_start"].to_numpy(np.int64),
                group["gps_end"].to_numpy(np.int64),
            )
            for name, group in rows.groupby("channel", sort=True)
        }
        return {name: found.get(name, Segments.none()) for name in self.transients}

    def faults(self, channel: str) -> dict[str, Segments]:
        """Give a channel's faults by kind, without the kinds that did not occur."""
        rows = self.coverage[self.coverage["channel"] == channel]
        kinds = sorted(set(rows["kind"]) - set(_ACCOUNTED))
        return {kind: self.time(kind)[channel] for kind in kinds}

    @property
    def left_out(self) -> dict[str, str]:
        """Channels that could not be analysed, with the reason."""
        rows = self.channels[self.channels["status"] == "left_out"]
        return dict(zip(rows["channel"], rows["reason"], strict=True))

    @property
    def faulty(self) -> dict[str, float]:
        """Analysed channels with faults, and the seconds that these took."""
        rows = self.channels[self.channels["fault_s"].fillna(0) > 0]
        return dict(zip(rows["channel"], rows["fault_s"], strict=True))

    @property
    def safety(self) -> dict[str, str]:
        """What the channel list says of each auxiliary channel: yes, no or empty."""
        rows = self.channels
        return dict(zip(rows["channel"], rows["safe"].fillna(""), strict=True))


def make_ledger(
    rows: list[Channel],
    results: dict[str, ChannelResult],
    left_out: dict[str, str],
) -> Ledger:
    """Gather the channels' results into tables, in the order of the names.

    Parameters
    ----------
    rows : list of Channel
        The strain and the auxiliary channels of the list.
    results : dict of str to ChannelResult
    left_out : dict of str to str

    Returns
    -------
    Ledger
    """
    rows, results = _with_derived(rows, results)
    order = sorted(rows, key=lambda row: (row.role != "strain", row.name))
    lines = [_line(row, results.get(row.name), left_out) for row in order]
    spans = [
        (row.name, kind, low, high)
        for row in order
        if row.name in results
        for kind, segments in _kinds(results[row.name]).items()
        for low, high in segments
    ]
    columns = [c.name for c in COVERAGE]
    return Ledger(
        strain=next(row.name for row in rows if row.role == "strain"),
        transients={n: results[n].transients for n in sorted(results)},
        channels=conform(pd.DataFrame(lines), NIGHT_CHANNELS),
        coverage=conform(pd.DataFrame(spans, columns=columns), COVERAGE),
    )


def _with_derived(
    rows: list[Channel], results: dict[str, ChannelResult]
) -> tuple[list[Channel], dict[str, ChannelResult]]:
    """Add the derived channels as channels; their parents' faults are not theirs."""
    rows = list(rows)
    results = {
        name: replace(result, faults={}) if "@" in name else result
        for name, result in results.items()
    }
    for row in list(rows):
        parent = results.get(row.name)
        for name, one in (parent.derived if parent else {}).items():
            rows.append(Channel(name=name, role="auxiliary", safe=row.safe))
            finite = parent.analysed | parent.unjudged
            results[name] = ChannelResult(
                channel=name,
                sample_rate=one.sample_rate,
                f_low_hz=one.f_low_hz,
                f_high_hz=one.f_high_hz,
                transients=one.transients,
                analysed=one.analysed & finite,
                missing=parent.missing,
                unjudged=finite - one.analysed,
                faults={},
            )
    return rows, results


def _kinds(result: ChannelResult) -> dict[str, Segments]:
    accounted = {kind: getattr(result, kind) for kind in _ACCOUNTED}
    return {**accounted, **dict(sorted(result.faults.items()))}


def _line(row: Channel, result: ChannelResult | None, left_out: dict) -> dict:
    line = {"channel": row.name, "role": row.role, "safe": row.safe}
    if result is None:
        return line | {"status": "left_out", "reason": left_out[row.name]}
    fault = Segments.none()
    for segments in result.faults.values():
        fault |= segments
    return line | {
        "sample_rate_hz": result.sample_rate,
        "f_low_hz": result.f_low_hz,
        "f_high_hz": result.f_high_hz,
        "analysed_s": result.analysed.total_s,
        "missing_s": result.missing.total_s,
        "unjudged_s": result.unjudged.total_s,
        "fault_s": fault.total_s,
        "transients": len(result.transients),
        "status": "ok",
        "reason": "; ".join(result.notes),
    }


def read_ledger(directory: Path, strain: str) -> Ledger:
    """Read the tables of a night's folder back.

    Parameters
    ----------
    directory : Path
    strain : str
        Name of the strain channel.

    Raises
    ------
    InputError
        A table is missing or damaged.
    """
    from dq.writers import read_transients_h5

    transients = read_transients_h5(directory / TRANSIENTS_FILE)
    rows = len(transients.get(strain, ()))
    features = _read_table(directory / FEATURES_FILE, FEATURE_COLUMNS, rows=rows)
    families = None
    if features is not None:
        families = _read_table(directory / STRAIN_FILE, FAMILY_COLUMNS, rows=rows)
    return Ledger(
        strain,
        transients,
        _read_table(directory / CHANNELS_FILE, NIGHT_CHANNELS),
        _read_table(directory / COVERAGE_FILE, COVERAGE),
        features,
        families,
        injections=_read_optional(directory / INJECTIONS_FILE, INJECTIONS),
    )


def _read_table(path: Path, columns, *, rows: int | None = None):
    """Read one table; with ``rows`` it may be absent, and must have that many."""
    if rows is not None and not path.exists():
        return None
    try:
        table = csv_table(path.read_text(encoding="utf-8"), columns)
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(
            f"cannot read {str(path)!r}: {error}; run the night again"
        ) from error
    except InputError as error:
        raise InputError(f"{str(path)!r}: {error}; run the night again") from error
    if rows is not None and len(table) != rows:
        raise InputError(
            f"{str(path)!r} has {len(table)} rows for {rows} strain transients; run "
            "the night again"
        )
    return table


def write_optional(path: Path, table: pd.DataFrame | None, columns) -> None:
    """Write a table that a night may have; without one there is no file."""
    from dq.writers import write_table

    if table is None:
        path.unlink(missing_ok=True)
    else:
        write_table(path, table, columns)


def read_planted(directory: Path) -> pd.DataFrame | None:
    """Read the simulated signals of a night's folder; None where none were planted.

    Raises
    ------
    InputError
        The table is damaged.
    """
    return _read_optional(directory / PLANTED_FILE, PLANTED)


def _read_optional(path: Path, columns) -> pd.DataFrame | None:
    return _read_table(path, columns) if path.exists() else None
