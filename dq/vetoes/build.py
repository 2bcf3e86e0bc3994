"""Veto segments from data faults, accepted witnesses and families of the strain."""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import TYPE_CHECKING

from dq.config import NEVER_VETOED
from dq.errors import InputError
from dq.segments import NS, Segments, to_ns_array
from dq.tables import VETOES, conform
from dq.witnesses.windows import windows_of

if TYPE_CHECKING:
    import pandas as pd

    from dq.config import Vetoes

#: Order of the kinds of faults; kinds not named here follow by name.
FAULTS = ("saturation", "flat_line", "dropout", "not_finite")

#: Categories, common practice: 1 the data cannot be used; 2 a safe witness; 3
#: statistical association only.
UNUSABLE, SAFE, STATISTICAL = 1, 2, 3


def file_safe(name: str) -> str:
    """Turn a channel name into one that every file system takes, in lower case.

    Examples
    --------
    >>> file_safe("OV-HALL:MICROPHONE")
    'ov-hall_microphone'
    """
    return re.sub(r"[^a-z0-9._-]", "_", name.lower())[:120]


def build_vetoes(
    witnesses: pd.DataFrame,
    auxiliary: Mapping[str, pd.DataFrame],
    faults: Mapping[str, Segments],
    *,
    analysed: Segments,
    settings: Vetoes,
    strain: pd.DataFrame | None = None,
) -> pd.DataFrame:
    """Build the segments of every veto, clipped to analysed time.

    Parameters
    ----------
    witnesses : pandas.DataFrame
        ``dq.tables.WITNESSES``.
    auxiliary : mapping of str to pandas.DataFrame
        Transients of the channels.
    faults : mapping of str to Segments
        The strain's faults by kind. A kind that lies wholly outside analysed time, as
        values that are not finite do, makes no veto: nobody judged that time.
    analysed : Segments
    settings : dq.config.Vetoes
    strain : pandas.DataFrame, optional
        The strain's transients with their ``family``; read where the settings name
        families to veto.

    Returns
    -------
    pandas.DataFrame
        ``dq.tables.VETOES``: faults first, then witnesses in their order, then
        families in the order of the settings.

    Raises
    ------
    InputError
        The settings name a family that is never vetoed.
    """
    rows: list[tuple] = []
    used: set[str] = set()

    def add(name: str, segments: Segments, *what) -> None:
        name = _unique(name, used)
        if settings.whole_seconds:
            segments = segments.round_outward(NS)
        rows.extend((s, e, name, *what) for s, e in segments & analysed)

    pad = round(settings.fault_padding_s * NS)
    for kind in sorted(faults, key=_place):
        name = f"fault-{file_safe(kind.replace('_', '-'))}"
        # a fault outside analysed time stays outside, however its borders are rounded
        touched = faults[kind].pad(pad) & analysed
        add(name, touched, UNUSABLE, "fault", "", "")
    accepted = witnesses[witnesses["accepted"].fillna(False).astype(bool)]
    for row in accepted.itertuples():
        family = "" if row.target == "all" else str(row.target)
        name = f"witness-{file_safe(row.channel)}"
        if family:
            name += f"-{file_safe(family)}"
        category = SAFE if row.safety == "safe" else STATISTICAL
        windows = windows_of(row, auxiliary[row.channel])
        add(name, windows, category, "witness", row.channel, family)
    for family in settings.strain_families:
        segments = family_segments(strain, family, padding_s=settings.family_padding_s)
        name = f"family-{file_safe(family)}"
        add(name, segments, STATISTICAL, "family", "", family)
    return _frame(rows)


def family_segments(
    strain: pd.DataFrame | None, family: str, *, padding_s: float
) -> Segments:
    """Give the time of the strain's own transients of one family.

    Such a veto is derived from the data that are searched: a signal that is sorted
    into the family vetoes itself, so its loss must be measured with planted signals.

    Parameters
    ----------
    strain : pandas.DataFrame or None
        With ``gps_start``, ``gps_end`` and ``family``.
    family : str
    padding_s : float
        Added on both sides.

    Returns
    -------
    Segments

    Raises
    ------
    InputError
        The family is one that is never vetoed.
    """
    if family in NEVER_VETOED:
        raise InputError(
            f"family {family!r} is never vetoed, since a signal may be sorted into it; "
            "remove it from vetoes.strain_families"
        )
    if strain is None or "family" not in strain:
        return Segments.none()
    rows = strain[(strain["family"] == family).fillna(False).astype(bool)]
    pad = round(padding_s * NS)
    starts = to_ns_array(rows["gps_start"].to_numpy(float)) - pad
    ends = to_ns_array(rows["gps_end"].to_numpy(float)) + pad
    return Segments.from_arrays(starts, ends)


def _place(kind: str) -> tuple[int, str]:
    return (FAULTS.index(kind) if kind in FAULTS else len(FAULTS)), kind


def _unique(name: str, used: set[str]) -> str:
    number, out = 1, name
    while out in used:
        number += 1
        out = f"{name}-{number}"
    used.add(out)
    return out


def _frame(rows: list[tuple]) -> pd.DataFrame:
    import pandas as pd

    names = [c.name for c in VETOES]
    columns = list(zip(*rows, strict=True)) if rows else [[] for _ in names]
    return conform(pd.DataFrame(dict(zip(names, columns, strict=True))), VETOES)
