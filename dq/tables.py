"""Names, types, units and printed digits of every table's columns.

The only place that knows column names. A table is a ``pandas.DataFrame``; times are
GPS seconds as float64, rounded to the microsecond, except in segment tables (vetoes,
coverage) where times are exact integer nanoseconds inside and exact decimals in
files.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import pandas as pd

from dq.errors import InputError
from dq.segments import seconds_text, to_ns_list


@dataclass(frozen=True)
class Column:
    """One column: name, kind, unit and how it is printed.

    ``kind`` is ``float``, ``int``, ``text``, ``flag`` (yes / no) or ``time_ns`` (exact
    integer nanoseconds in memory, decimal seconds in the file).
    ``format`` is the printf-style format of a float. An ``optional`` column may be
    absent from a table that is read, as from one that an earlier version wrote.
    """

    name: str
    kind: str
    unit: str = ""
    format: str = "%.6g"
    meaning: str = ""
    optional: bool = False


def _floats(*specs: tuple[str, str, str, str]) -> tuple[Column, ...]:
    return tuple(Column(n, "float", u, f, m) for n, u, f, m in specs)


_TRANSIENT: tuple[Column, ...] = (
    *_floats(
        ("gps_time", "s", "%.6f", "time of the peak"),
        ("gps_start", "s", "%.6f", "start of the tiles above threshold"),
        ("gps_end", "s", "%.6f", "end of the tiles above threshold"),
        ("frequency_hz", "Hz", "%.4f", "frequency of the peak"),
        ("f_low_hz", "Hz", "%.4f", "lower edge of the tiles above threshold"),
        ("f_high_hz", "Hz", "%.4f", "upper edge of the tiles above threshold"),
        ("q", "1", "%.4f", "tile Q of the loudest tile"),
        ("snr", "1", "%.4f", "signal-to-noise ratio of the loudest tile"),
        ("amplitude", "unit s^1/2", "%.6e", "root-sum-square amplitude of the peak"),
    ),
    Column("tile_count", "int", "1", "%d", "tiles above threshold"),
)

_SPREAD: tuple[Column, ...] = tuple(
    Column(name, "float", "1", "%.4f", meaning, optional=True)
    for name, meaning in (
        ("summed_snr", "signal-to-noise ratio of all its tiles together"),
        ("cluster_snr", "snr of a tile as rare in noise as all its bright tiles"),
    )
)

#: One row per transient of one channel (``transients.h5``, ``dq find``).
TRANSIENTS: tuple[Column, ...] = (*_TRANSIENT, *_SPREAD)

#: Columns of ``strain_transients.csv``.
STRAIN_TRANSIENTS: tuple[Column, ...] = (
    Column("transient_id", "text", meaning="stable name of the row"),
    *_TRANSIENT,
    Column("family", "text", meaning="noise family; unknown = declined"),
    Column("probability", "float", "1", "%.4f", "calibrated family probability"),
    Column("family_set", "text", meaning="families the sorter cannot exclude"),
    Column("novelty", "float", "1", "%.4f", "distance from the training set"),
    Column("witness", "text", meaning="accepted witnesses active at the time"),
    Column("veto", "text", meaning="vetoes that cover the time"),
    *_SPREAD,
)

#: Columns of ``witnesses.csv``.
WITNESSES: tuple[Column, ...] = (
    Column("order", "int", "1", "%d", "order of selection; empty when not chosen"),
    Column("channel", "text"),
    Column("target", "text", meaning="which strain transients were tested"),
    Column("snr_threshold", "float", "1", "%g", "threshold on the channel"),
    Column("half_window_s", "float", "s", "%g", "half-width of the window"),
    Column("coincidences", "int", "1", "%d", "strain transients in the windows"),
    Column("expected", "float", "1", "%.6g", "coincidences expected by chance"),
    Column("significance", "float", "1", "%.4f", "-log10 of the chance probability"),
    Column("p_value", "float", "1", "%.4g", "chance probability, trials counted"),
    Column("efficiency", "float", "1", "%.6f", "fraction of the target removed"),
    Column("dead_time_s", "float", "s", "%.6f", "time in the windows"),
    Column("use_fraction", "float", "1", "%.6f", "windows that hold a transient"),
    Column("safety", "text", meaning="safe, unsafe, or cannot tell"),
    Column("accepted", "flag"),
    Column("reason", "text"),
    Column("clusters", "int", "1", "%d", "clusters of strain transients met"),
    *_floats(
        ("clusters_expected", "1", "%.6g", "clusters met by chance, at most"),
        ("dispersion", "1", "%.4f", "variance over mean of shifted counts"),
        ("calibrated_significance", "1", "%.4f", "what the decision rests on"),
    ),
    Column("trials", "int", "1", "%d", "combinations counted: all, or its own again"),
    *_floats(
        ("delay_s", "s", "%.6f", "strain minus witness"),
        ("before_s", "s", "%g", "window before the witness's activity"),
        ("after_s", "s", "%g", "window after it"),
    ),
    Column("kind", "text", meaning="transients, motion, fringe or product"),
    Column("q_value", "float", "1", "%.4g", "false-discovery rate at this row"),
    Column("redundant_with", "text", meaning="better witness of the same transients"),
    Column("around", "text", meaning="windows lie around its activity or its peak"),
)

#: Columns of ``vetoes.csv``.
VETOES: tuple[Column, ...] = (
    Column("gps_start", "time_ns", "s"),
    Column("gps_end", "time_ns", "s"),
    Column("veto", "text", meaning="name of the veto, also its file's"),
    Column("category", "int", "1", "%d"),
    Column("source", "text", meaning="fault, witness or family"),
    Column("channel", "text"),
    Column("family", "text"),
)

#: Columns of ``veto_cost.csv``.
VETO_COST: tuple[Column, ...] = (
    Column("veto", "text"),
    Column("category", "int", "1", "%d"),
    Column("source", "text"),
    Column("channel", "text"),
    Column("family", "text"),
    Column("segments", "int", "1", "%d"),
    *_floats(
        ("dead_time_s", "s", "%.6f", "analysed time removed"),
        ("dead_time_fraction", "1", "%.8f", "of the analysed time"),
        ("added_dead_time_s", "s", "%.6f", "beyond the vetoes above it"),
    ),
    Column("removed", "int", "1", "%d", "strain transients removed"),
    *_floats(
        ("efficiency", "1", "%.6f", "fraction of strain transients removed"),
        ("efficiency_snr8", "1", "%.6f", "the same for SNR >= 8"),
        ("efficiency_snr20", "1", "%.6f", "the same for SNR >= 20"),
    ),
    Column("added_removed", "int", "1", "%d", "removed beyond the vetoes above it"),
    *_floats(
        ("use_fraction", "1", "%.6f", "segments that hold a transient"),
        ("expected_by_chance", "1", "%.6g", "transients a random veto removes"),
        ("p_value", "1", "%.4g", "chance probability of this many removed"),
        ("held_out_efficiency", "1", "%.6f", "efficiency on data not chosen from"),
        ("held_out_low", "1", "%.6f", "95 % interval, lower"),
        ("held_out_high", "1", "%.6f", "95 % interval, upper"),
        ("signal_loss", "1", "%.6f", "planted signals vetoed"),
        ("unique_dead_time_s", "s", "%.6f", "dead time that no other veto has"),
    ),
    Column("unique_removed", "int", "1", "%d", "removed by no other veto"),
    *_floats(
        ("efficiency_over_dead_time", "1", "%.6g", "efficiency / dead time fraction"),
        ("efficiency_over_dead_time_low", "1", "%.6g", "95 % interval, lower"),
        ("efficiency_over_dead_time_high", "1", "%.6g", "95 % interval, upper"),
        ("signal_loss_low", "1", "%.6f", "95 % interval, lower"),
        ("signal_loss_high", "1", "%.6f", "95 % interval, upper"),
        ("volume_time_ratio", "1", "%.6f", "search volume x time, this veto alone"),
        ("volume_time_unique", "1", "%.6f", "the same, beside all other vetoes"),
    ),
    Column("test_signals", "int", "1", "%d", "test signals in analysed time"),
    Column("test_signals_vetoed", "int", "1", "%d", "of these, inside the veto"),
    *_floats(
        ("test_signals_low", "1", "%.6f", "their share, 95 % interval, lower"),
        ("test_signals_high", "1", "%.6f", "95 % interval, upper"),
        ("test_signals_p_value", "1", "%.4g", "chance of as many, by dead time"),
    ),
)

#: Columns of ``veto_curve.csv``: vetoes in order of gain per dead time, budget aside.
VETO_CURVE: tuple[Column, ...] = (
    Column("step", "int", "1", "%d", "0: the faults alone"),
    Column("veto", "text", meaning="veto added at this step"),
    *_floats(
        ("dead_time_s", "s", "%.6f", "of this veto and all above it"),
        ("dead_time_fraction", "1", "%.8f", "of the analysed time"),
    ),
    Column("removed", "int", "1", "%d", "strain transients removed"),
    *_floats(
        ("efficiency", "1", "%.6f", "fraction of strain transients removed"),
        ("gain", "1", "%.6f", "fraction of the transients' weight removed"),
        ("bound", "1", "%.6f", "gain that no choice of this dead time exceeds"),
    ),
    Column("chosen", "flag", meaning="whether the night applies the veto"),
)

#: Columns of ``planted.csv``: simulated signals added to the strain in memory.
PLANTED: tuple[Column, ...] = (
    Column("gps_time", "float", "s", "%.6f", "time of the peak or of the coalescence"),
    Column("kind", "text", meaning="chirp or burst"),
    Column("snr", "float", "1", "%.4f", "optimal signal-to-noise ratio"),
    Column("found", "flag", meaning="whether a transient was found there"),
    *_floats(
        ("gps_start", "s", "%.6f", "start of the transient found"),
        ("gps_end", "s", "%.6f", "its end"),
        ("found_snr", "1", "%.4f", "its SNR"),
    ),
    Column("family", "text", meaning="the family that it was sorted into"),
)

#: Columns of a night's ``injections.csv``: the test signals that it knew of.
INJECTIONS: tuple[Column, ...] = (
    Column("gps_time", "float", "s", "%.6f"),
    Column("kind", "text"),
    Column("snr", "float", "1", "%.4f", "as the user's list says"),
)

#: Columns of a night's ``channels.csv``: how every channel of the list fared.
NIGHT_CHANNELS: tuple[Column, ...] = (
    Column("channel", "text"),
    Column("role", "text", meaning="strain or auxiliary"),
    *_floats(
        ("sample_rate_hz", "Hz", "%.9g", "of the recording"),
        ("f_low_hz", "Hz", "%.4f", "lower edge of the band searched"),
        ("f_high_hz", "Hz", "%.4f", "upper edge of the band searched"),
        ("analysed_s", "s", "%.6f", "time judged"),
        ("missing_s", "s", "%.6f", "wanted, but not recorded or not finite"),
        ("unjudged_s", "s", "%.6f", "recorded, but in the settling of an end"),
        ("fault_s", "s", "%.6f", "saturated, flat, dropped out or not finite"),
    ),
    Column("transients", "int", "1", "%d"),
    Column("safe", "text", meaning="yes, no, or empty: decide from injections"),
    Column("status", "text", meaning="ok or left_out"),
    Column("reason", "text", meaning="why it was left out, or a note"),
)

#: Columns of a night's ``coverage.csv``: where each channel's time went.
COVERAGE: tuple[Column, ...] = (
    Column("channel", "text"),
    Column("kind", "text", meaning="analysed, missing, unjudged, or a fault's kind"),
    Column("gps_start", "time_ns", "s"),
    Column("gps_end", "time_ns", "s"),
)

#: Columns of ``channels.csv`` as the user writes it; role and channel are required.
CHANNEL_LIST: tuple[str, ...] = (
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

#: What the part of a derived channel's name behind ``@`` begins with -> its kind.
_KINDS = {"rms": "motion", "fringe": "fringe", "product": "product"}


def kind_of(channel: str) -> str:
    """Give the kind of a channel's rows: transients, motion, fringe or product.

    Examples
    --------
    >>> kind_of("OV-A"), kind_of("OV-A@rms-1-2Hz"), kind_of("OV-A@fringe-n2")
    ('transients', 'motion', 'fringe')
    """
    return _KINDS.get(channel.partition("@")[2].partition("-")[0], "transients")


def recordings_of(channel: str) -> tuple[str, ...]:
    """Give the recorded channels that a channel is made from.

    A derived channel is at most as safe as each of them.

    Examples
    --------
    >>> recordings_of("OV-A"), recordings_of("OV-A@rms-1-2Hz")
    (('OV-A',), ('OV-A',))
    >>> recordings_of("OV-A@product-OV-B")
    ('OV-A', 'OV-B')
    """
    first, _, rest = channel.partition("@")
    kind, _, second = rest.partition("-")
    return (first, second) if kind == "product" else (first,)


_DTYPES = {"float": "float64", "int": "Int64", "text": "string", "flag": "boolean"}


def empty(columns: tuple[Column, ...]) -> pd.DataFrame:
    """Give a table with the columns and no rows."""
    return conform(pd.DataFrame({c.name: [] for c in columns}), columns)


def conform(table: pd.DataFrame, columns: tuple[Column, ...]) -> pd.DataFrame:
    """Give the table the columns' order and types; absent columns become missing.

    Parameters
    ----------
    table : pandas.DataFrame
    columns : tuple of Column

    Returns
    -------
    pandas.DataFrame
        A new table; columns that the specification does not name are an error.

    Raises
    ------
    InputError
        The table holds a column that the specification does not name.
    """
    names = [c.name for c in columns]
    extra = [c for c in table.columns if c not in names]
    if extra:
        raise InputError(
            f"table holds unknown column {extra[0]!r}; known are {', '.join(names)}"
        )
    out = {}
    for c in columns:
        if c.kind == "time_ns":
            out[c.name] = pd.array(np.asarray(table[c.name], dtype=np.int64))
            continue
        out[c.name] = _typed(table.get(c.name), _DTYPES[c.kind], len(table))
    return pd.DataFrame(out, columns=names)


def _typed(values: pd.Series | None, dtype: str, rows: int):
    """Give a column as an array of its type; quick where the type is right already."""
    if values is None:
        values = pd.Series([pd.NA] * rows, dtype="object")
    if dtype == "float64":
        if values.dtype == np.float64:
            return values.to_numpy(copy=True)
        return pd.to_numeric(values, errors="coerce").astype(dtype).array
    if dtype == "Int64" and values.dtype == np.int64:
        return pd.array(values.to_numpy(), dtype=dtype)
    return values.astype(dtype).array


def format_column(values: pd.Series, column: Column) -> list[str]:
    """Format one column for a CSV file; a missing value is an empty cell."""
    if column.kind == "time_ns":
        return [seconds_text(v) for v in values]
    missing = values.isna().to_numpy()
    if column.kind == "float":
        cells = [column.format % v for v in values.fillna(0.0)]
    elif column.kind == "int":
        cells = [str(int(v)) for v in values.fillna(0)]
    elif column.kind == "flag":
        cells = ["yes" if v else "no" for v in values.fillna(False)]
    else:
        cells = [str(v) for v in values.fillna("")]
    return ["" if m else c for m, c in zip(missing, cells, strict=True)]


def csv_text(table: pd.DataFrame, columns: tuple[Column, ...]) -> str:
    r"""Write a table as CSV text: one header line, fixed digits, ``\n`` line ends.

    Examples
    --------
    >>> csv_text(empty(VETOES), VETOES)
    'gps_start,gps_end,veto,category,source,channel,family\n'
    """
    import csv
    import io

    table = conform(table, columns)
    cells = [format_column(table[c.name], c) for c in columns]
    stream = io.StringIO()
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerow([c.name for c in columns])
    writer.writerows(zip(*cells, strict=True))
    return stream.getvalue()


def csv_table(
    text: str,
    columns: tuple[Column, ...],
    *,
    keep: Callable[[pd.DataFrame], np.ndarray] | None = None,
) -> pd.DataFrame:
    r"""Read back what :func:`csv_text` wrote; an empty cell is a missing value.

    Parameters
    ----------
    text : str
    columns : tuple of Column
    keep : callable, optional
        Says from the cells, as texts, which rows are wanted; the others are not
        turned into values.

    Raises
    ------
    InputError
        A column is absent or unknown, or a cell does not fit its column.

    Examples
    --------
    >>> text = "channel,kind,gps_start,gps_end\nA,analysed,10.5,11\n"
    >>> csv_table(text, COVERAGE).gps_start.tolist()
    [10500000000]
    """
    import io

    try:
        cells = pd.read_csv(io.StringIO(text), dtype=str, keep_default_na=False)
        if keep is not None:
            cells = cells[keep(cells)].reset_index(drop=True)
        found = [c for c in columns if c.name in cells or not c.optional]
        table = {c.name: _parse_column(cells[c.name], c) for c in found}
    except (ValueError, KeyError, pd.errors.ParserError) as error:
        raise InputError(f"table does not read back: {error}") from error
    return conform(pd.DataFrame(table), columns)


def _parse_column(cells: pd.Series, column: Column) -> pd.Series:
    if column.kind == "time_ns":
        return pd.Series(to_ns_list(cells), index=cells.index, dtype="int64")
    known = cells.mask(cells == "")
    if column.kind == "flag":
        return known.map({"yes": True, "no": False})
    if column.kind in ("int", "float"):
        return pd.to_numeric(known)
    return known
