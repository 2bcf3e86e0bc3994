"""``transients.h5``: every transient of every channel.

One group per channel, one one-dimensional dataset per column of
``dq.tables.TRANSIENTS``; units stand in the datasets' attributes, what is known of the
channel in the group's.
"""

from __future__ import annotations

import io
from collections.abc import Iterable, Mapping
from pathlib import Path

import h5py
import numpy as np
import pandas as pd

from dq.errors import InputError
from dq.tables import TRANSIENTS, conform
from dq.writers.atomic import write_atomically

SCHEMA = 1


def write_transients_h5(
    path: str | Path, channels: Mapping[str, tuple[pd.DataFrame, Mapping]]
) -> None:
    """Write the file; equal tables give equal bytes.

    Parameters
    ----------
    path : str or Path
    channels : mapping of str to (DataFrame, mapping)
        Transients and attributes of each channel.

    Raises
    ------
    OutputError
        The file cannot be written.
    """
    buffer = io.BytesIO()
    with h5py.File(buffer, "w") as file:
        file.attrs["schema"] = SCHEMA
        for name in sorted(channels):
            table, attributes = channels[name]
            table = conform(table, TRANSIENTS)
            group = file.create_group(name)
            for key in sorted(attributes):
                group.attrs[key] = attributes[key]
            for column in TRANSIENTS:
                dtype = np.int64 if column.kind == "int" else np.float64
                values = table[column.name].to_numpy(dtype)
                data = group.create_dataset(column.name, data=values, track_times=False)
                data.attrs["unit"] = column.unit
    write_atomically(path, buffer.getvalue())


def read_transients_h5(
    path: str | Path,
    channels: Iterable[str] | None = None,
    *,
    columns: Iterable[str] | None = None,
) -> dict[str, pd.DataFrame]:
    """Read the transients of some or all channels.

    Parameters
    ----------
    path : str or Path
    channels : iterable of str, optional
        Channels that the file does not hold are left out of the result.
    columns : iterable of str, optional
        Only these are read; by default all.

    Raises
    ------
    InputError
        The file is missing, damaged, or of another schema.
    """
    try:
        with h5py.File(path, "r") as file:
            schema = file.attrs.get("schema")
            if schema != SCHEMA:
                raise InputError(
                    f"{str(path)!r} has schema {schema}, this version reads {SCHEMA}; "
                    "run the night again"
                )
            names = (
                list(file) if channels is None else [c for c in channels if c in file]
            )
            if columns is not None:
                columns = tuple(columns)
                return {name: _some(file[name], columns) for name in names}
            return {name: _table(file[name]) for name in names}
    except (OSError, KeyError) as error:
        text = " ".join(str(error).split())
        raise InputError(
            f"cannot read {str(path)!r}: {text}; run the night again"
        ) from error


def _table(group: h5py.Group) -> pd.DataFrame:
    found = [c.name for c in TRANSIENTS if c.name in group or not c.optional]
    return conform(pd.DataFrame({name: group[name][:] for name in found}), TRANSIENTS)


def _some(group: h5py.Group, columns: tuple[str, ...]) -> pd.DataFrame:
    return pd.DataFrame({name: group[name][:] for name in columns})
