"""Families for a table of transients, outside a night."""

from __future__ import annotations

import logging
from pathlib import Path

import pandas as pd

from dq.config import Config
from dq.errors import ChannelError, InputError, NoDataError
from dq.night.feature_stage import check_model, feature_table, sort_features
from dq.night.inputs import nearest, read_inputs
from dq.night.judge import transient_ids
from dq.night.strain_features import measure_transients
from dq.tables import STRAIN_TRANSIENTS, TRANSIENTS, conform, csv_table

log = logging.getLogger(__name__)


def read_transients(path: Path, channel: str) -> pd.DataFrame:
    """Read a table of one channel's transients, as ``dq find`` writes it.

    Parameters
    ----------
    path : Path
        ``.csv`` with the columns ``dq.tables.TRANSIENTS`` (others are ignored), or
        ``.h5`` with a group of the channel's name.
    channel : str

    Returns
    -------
    pandas.DataFrame
        ``dq.tables.TRANSIENTS``, in the file's order.

    Raises
    ------
    InputError
        The file is missing, of another kind, or holds no such table.
    """
    from dq.writers import read_transients_h5

    if path.suffix not in (".csv", ".h5"):
        raise InputError(f"transients {str(path)!r} must end in .csv or .h5")
    if not path.is_file():
        raise InputError(f"transients {str(path)!r} is no file; make one with dq find")
    if path.suffix == ".h5":
        tables = read_transients_h5(path)
        if channel not in tables:
            raise InputError(
                f"{str(path)!r} holds no transients of {channel!r}"
                + nearest(channel, list(tables))
            )
        table = tables[channel]
    else:
        try:
            table = csv_table(path.read_text(encoding="utf-8"), TRANSIENTS)
        except (InputError, OSError, UnicodeDecodeError) as error:
            raise InputError(f"transients {str(path)!r}: {error}") from error
    _check_transients(table, path)
    return table


def _check_transients(table: pd.DataFrame, path: Path) -> None:
    needed = ["gps_time", "gps_start", "gps_end", "frequency_hz"]
    needed += ["f_low_hz", "f_high_hz"]
    bad = table[needed].isna().any(axis=1)
    bad |= ~(table["gps_start"] <= table["gps_end"])
    bad |= ~((table["f_low_hz"] > 0) & (table["f_low_hz"] <= table["f_high_hz"]))
    bad |= ~table["gps_time"].between(0, 9_223_372_036)
    if bad.any():
        row = int(bad.to_numpy().argmax())
        values = ", ".join(f"{c}={table[c].iloc[row]:g}" for c in needed)
        raise InputError(
            f"transients {str(path)!r}, row {row + 1}: {values}; times need start <= "
            "end, bands 0 < f_low_hz <= f_high_hz, and no cell may be empty"
        )


def sort_table(
    config: Config, transients: pd.DataFrame, *, model: Path, progress=None
) -> tuple[pd.DataFrame, dict[int, str]]:
    """Measure and sort transients of the strain.

    Parameters
    ----------
    config : Config
    transients : pandas.DataFrame
        ``dq.tables.TRANSIENTS``; they need not come from one night.
    model : Path
    progress : callable, optional
        Called with the fraction done.

    Returns
    -------
    table : pandas.DataFrame
        ``dq.tables.STRAIN_TRANSIENTS``; witness and veto stay empty.
    left_out : dict of int to str
        Positions of transients that could not be measured, with the reason.

    Raises
    ------
    InputError
        The model or the configuration cannot be used.
    NoDataError, ChannelError
        The strain has no data, or they cannot be read.
    """
    check_model(model)
    inputs = read_inputs(config)
    row = inputs.strain
    if row.name not in inputs.store.channels:
        raise NoDataError(f"strain {row.name!r}: {inputs.why_absent(row.name)}")
    try:
        found = measure_transients(
            inputs.store.channel(row.name),
            transients,
            ready=inputs.wanted,
            config=config,
            f_low_hz=row.f_low_hz,
            f_high_hz=row.f_high_hz,
            progress=progress,
        )
    except OSError as error:
        raise ChannelError(f"channel {row.name!r} cannot be read: {error}") from error
    for position, reason in found.left_out.items():
        time = transients["gps_time"].iloc[position]
        log.warning("GPS %.6f is not sorted: %s", time, reason)
    families = sort_features(feature_table(transients, found), model)
    table = transients.reset_index(drop=True).assign(
        transient_id=transient_ids(transients),
        **{name: families[name].array for name in families},
    )
    return conform(table, STRAIN_TRANSIENTS), found.left_out
