"""State of one channel on disk: what a killed night finds again.

A state file holds a channel's result and the key of everything the result depends on.
Another key, another version or a damaged file means: analyse again.
"""

from __future__ import annotations

import hashlib
import io
import json
import re
from dataclasses import fields
from pathlib import Path

import h5py
import numpy as np
import pandas as pd

from dq.night.channel import ChannelResult
from dq.night.motion import Derived
from dq.segments import Segments
from dq.tables import TRANSIENTS, conform
from dq.writers import write_atomically

#: Grows when the meaning of a state file or of its content changes.
STATE_SCHEMA = 2

_SEGMENTS = ("analysed", "missing", "unjudged")
_DERIVED = ("sample_rate", "f_low_hz", "f_high_hz")


def state_path(directory: Path, channel: str) -> Path:
    """Give the state file of a channel.

    The name is readable, safe on every file system and unique: names may differ in
    letter case or in a colon only, and be 255 characters long.
    """
    readable = re.sub(r"[^A-Za-z0-9_.-]", "_", channel)[:80]
    unique = hashlib.sha256(channel.encode()).hexdigest()[:12]
    return directory / f"{readable}-{unique}.h5"


def save_state(path: Path, key: str, result: ChannelResult) -> None:
    """Write a channel's result beside its key, whole or not at all.

    Raises
    ------
    OutputError
        The file cannot be written.
    """
    buffer = io.BytesIO()
    with h5py.File(buffer, "w") as file:
        file.attrs["schema"] = STATE_SCHEMA
        file.attrs["key"] = key
        for f in fields(ChannelResult):
            value = getattr(result, f.name)
            if isinstance(value, str | float | int):
                file.attrs[f.name] = value
        file.create_dataset("notes", data=json.dumps(result.notes))
        for name in _SEGMENTS:
            _put_segments(file, name, getattr(result, name))
        for kind, segments in result.faults.items():
            _put_segments(file, f"faults/{kind}", segments)
        _put_table(file, "transients", result.transients)
        for name, derived in result.derived.items():
            group = file.create_group(f"derived/{name}")
            for key in _DERIVED:
                group.attrs[key] = getattr(derived, key)
            _put_segments(group, "analysed", derived.analysed)
            _put_table(group, "transients", derived.transients)
    write_atomically(path, buffer.getvalue())


def load_state(path: Path, key: str) -> ChannelResult | None:
    """Read a channel's result back; None unless file, schema and key all fit."""
    if not path.exists():
        return None
    try:
        with h5py.File(path, "r") as file:
            if file.attrs["schema"] != STATE_SCHEMA or file.attrs["key"] != key:
                return None
            return ChannelResult(
                channel=str(file.attrs["channel"]),
                sample_rate=float(file.attrs["sample_rate"]),
                f_low_hz=float(file.attrs["f_low_hz"]),
                f_high_hz=float(file.attrs["f_high_hz"]),
                transients=_get_table(file["transients"]),
                **{name: _get_segments(file[name]) for name in _SEGMENTS},
                faults={k: _get_segments(v) for k, v in file.get("faults", {}).items()},
                notes=json.loads(file["notes"][()]),
                derived={
                    k: _get_derived(v) for k, v in file.get("derived", {}).items()
                },
            )
    except (OSError, KeyError, ValueError, RuntimeError):
        return None


def _put_table(file: h5py.Group, name: str, table: pd.DataFrame) -> None:
    for column in table.columns:
        values = table[column].to_numpy()
        if column == "tile_count":
            values = values.astype(np.int64)
        file.create_dataset(f"{name}/{column}", data=values)


def _get_table(group: h5py.Group) -> pd.DataFrame:
    columns = {c.name: group[c.name][:] for c in TRANSIENTS}
    return conform(pd.DataFrame(columns), TRANSIENTS)


def _get_derived(group: h5py.Group) -> Derived:
    return Derived(
        **{key: float(group.attrs[key]) for key in _DERIVED},
        transients=_get_table(group["transients"]),
        analysed=_get_segments(group["analysed"]),
    )


def _put_segments(file: h5py.Group, name: str, segments: Segments) -> None:
    file.create_dataset(name, data=np.stack([segments.starts, segments.ends]))


def _get_segments(dataset: h5py.Dataset) -> Segments:
    starts, ends = dataset[:]
    return Segments.from_arrays(starts, ends)
