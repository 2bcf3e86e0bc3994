"""How many signals the vetoes would take away.

A veto that rests on auxiliary channels or on faults does not know when a signal comes,
so it takes away the share of signals that it takes of time: random times in analysed
time are held against it, and the share inside must agree with the dead time. A veto of
a family of the strain's own transients does know: a signal that is found and sorted
into that family is vetoed because it is there. Only signals added to the data before
finding and sorting (``dq.night.planting``) tell that loss.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING

import numpy as np

from dq.cost.cost import ALL, union_of
from dq.counting import clopper_pearson
from dq.segments import NS, Segments, to_ns_array

if TYPE_CHECKING:
    import pandas as pd

_COLUMNS = ["signal_loss", "signal_loss_low", "signal_loss_high"]


def random_times(
    analysed: Segments, count: int, rng: np.random.Generator
) -> np.ndarray:
    """Draw times evenly from analysed time.

    Parameters
    ----------
    analysed : Segments
    count : int
    rng : numpy.random.Generator

    Returns
    -------
    ndarray of int64
        Nanoseconds, sorted; empty without analysed time.
    """
    if not analysed:
        return np.zeros(0, dtype=np.int64)
    lengths = analysed.ends - analysed.starts
    ends = np.cumsum(lengths)
    drawn = np.sort(rng.integers(0, int(ends[-1]), count))
    index = np.searchsorted(ends, drawn, side="right")
    return analysed.starts[index] + drawn - (ends - lengths)[index]


def loss(lost: np.ndarray) -> tuple[float, float, float]:
    """Give the share of signals lost with its exact 95 % interval; NaN without any."""
    count, trials = int(np.count_nonzero(lost)), len(lost)
    if not trials:
        return (float("nan"),) * 3
    return (count / trials, *clopper_pearson(count, trials))


def signal_losses(
    segments: Mapping[str, Segments],
    times: np.ndarray,
    *,
    families: Mapping[str, str],
    planted: pd.DataFrame | None = None,
    padding_s: float = 0.0,
) -> pd.DataFrame:
    """Give the share of signals that each veto takes away.

    Parameters
    ----------
    segments : mapping of str to Segments
        The vetoes in force.
    times : ndarray of int64
        Random times as signals, nanoseconds.
    families : mapping of str to str
        Vetoes of the strain's own transients, with their family.
    planted : pandas.DataFrame, optional
        ``dq.tables.PLANTED``; needed for those vetoes.
    padding_s : float
        Of those vetoes, s.

    Returns
    -------
    pandas.DataFrame
        ``signal_loss`` and its 95 % interval, indexed by veto, with the row ``all``.
        Where a veto of a family was not measured with planted signals, its row and
        ``all`` are missing.
    """
    import pandas as pd

    rows = {n: loss(s.contains(times)) for n, s in segments.items()}
    rows[ALL] = loss(union_of(segments.values()).contains(times))
    if families:
        rows[ALL] = loss(np.zeros(0, dtype=bool))
        rows |= dict.fromkeys(families, rows[ALL])
    if families and planted is not None and _sorted(planted):
        at = to_ns_array(planted["gps_time"].to_numpy(float))
        any_lost = np.zeros(len(at), dtype=bool)
        for name, mine in segments.items():
            lost = mine.contains(at)
            if name in families:
                lost = lost | vetoes_itself(planted, families[name], padding_s)
                rows[name] = loss(lost)
            any_lost |= lost
        rows[ALL] = loss(any_lost)
    return pd.DataFrame.from_dict(rows, orient="index", columns=_COLUMNS, dtype=float)


def _sorted(planted: pd.DataFrame) -> bool:
    """Say whether the planted signals went through the sorter; else they tell less."""
    return len(planted) > 0 and not planted["family"].eq("unsorted").any()


def vetoes_itself(planted: pd.DataFrame, family: str, padding_s: float) -> np.ndarray:
    """Say which planted signals a veto of a family takes away because they are there.

    Parameters
    ----------
    planted : pandas.DataFrame
        ``dq.tables.PLANTED``.
    family : str
    padding_s : float
        Added on both sides of a transient of the family.

    Returns
    -------
    ndarray of bool
    """
    taken = planted["found"].fillna(False).to_numpy(bool)
    taken &= planted["family"].fillna("").eq(family).to_numpy(bool)
    out = np.zeros(len(planted), dtype=bool)
    rows = planted[taken]
    at, low, high = (
        to_ns_array(rows[c].to_numpy(float))
        for c in ("gps_time", "gps_start", "gps_end")
    )
    pad = round(padding_s * NS)
    out[taken] = (low - pad <= at) & (at < high + pad)
    return out
