"""Where every channel's time went: the night's own tables, built and read back.

``dq veto`` and ``dq report`` work from these tables alone, and so does the night after
its channels are done: there is one way from channels to vetoes, not two.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from dq.errors import InputError
from dq.night.channel import ChannelResult
from dq.segments import Segments
from dq.store import Channel
from dq.tables import COVERAGE, NIGHT_CHANNELS, PLANTED, conform, csv_table

CHANNELS_FILE = "channels.csv"
COVERAGE_FILE = "coverage.csv"
TRANSIENTS_FILE = "transients.h5"
PLANTED_FILE = "planted.csv"

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
    """

    strain: str
    transients: dict[str, pd.DataFrame]
    channels: pd.DataFrame
    coverage: pd.DataFrame

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

    tables = {}
    for name, columns in (
        (CHANNELS_FILE, NIGHT_CHANNELS),
        (COVERAGE_FILE, COVERAGE),
    ):
        tables[name] = _read(directory / name, columns)
    transients = read_transients_h5(directory / TRANSIENTS_FILE)
    return Ledger(strain, transients, tables[CHANNELS_FILE], tables[COVERAGE_FILE])


def _read(path: Path, columns) -> pd.DataFrame:
    try:
        return csv_table(path.read_text(encoding="utf-8"), columns)
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(
            f"cannot read {str(path)!r}: {error}; run the night again"
        ) from error
    except InputError as error:
        raise InputError(f"{str(path)!r}: {error}; run the night again") from error


def write_planted(directory: Path, planted: pd.DataFrame | None) -> None:
    """Write the simulated signals of a night; without any there is no file."""
    from dq.writers import write_table

    path = directory / PLANTED_FILE
    if planted is None:
        path.unlink(missing_ok=True)
    else:
        write_table(path, planted, PLANTED)


def read_planted(directory: Path) -> pd.DataFrame | None:
    """Read the simulated signals of a night's folder; None where none were planted.

    Raises
    ------
    InputError
        The table is damaged.
    """
    path = directory / PLANTED_FILE
    return _read(path, PLANTED) if path.exists() else None
