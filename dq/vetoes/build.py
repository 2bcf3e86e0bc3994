"""Veto segments from data faults and from accepted witnesses."""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import TYPE_CHECKING

from dq.segments import NS, Segments
from dq.tables import VETOES, conform
from dq.witnesses.windows import veto_windows

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

    Returns
    -------
    pandas.DataFrame
        ``dq.tables.VETOES``: faults first, then witnesses in their order.
    """
    rows: list[tuple] = []
    pad = round(settings.fault_padding_s * NS)
    used: set[str] = set()
    for kind in sorted(faults, key=_place):
        time = faults[kind].pad(pad) & analysed
        name = _unique(f"fault-{file_safe(kind.replace('_', '-'))}", used)
        rows += [(s, e, name, UNUSABLE, "fault", "", "") for s, e in time]
    accepted = witnesses[witnesses["accepted"].fillna(False).astype(bool)]
    for row in accepted.itertuples():
        windows = veto_windows(
            auxiliary[row.channel],
            snr_threshold=row.snr_threshold,
            half_window_s=row.half_window_s,
        )
        name = _unique(f"witness-{file_safe(row.channel)}", used)
        category = SAFE if row.safety == "safe" else STATISTICAL
        family = "" if row.target == "all" else row.target
        rows += [
            (s, e, name, category, "witness", row.channel, family)
            for s, e in windows & analysed
        ]
    return _frame(rows)


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
