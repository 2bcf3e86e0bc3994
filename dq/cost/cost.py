"""What vetoes cost and what they remove, for any list of segments."""

from __future__ import annotations

from collections.abc import Iterable
from typing import TYPE_CHECKING

import numpy as np

from dq.counting import binomial_chance, clopper_pearson
from dq.segments import NS, Segments, to_ns_array
from dq.tables import VETO_COST, conform

if TYPE_CHECKING:
    import pandas as pd

#: What a veto's own rows say of it.
_NAMED = ("category", "source", "channel", "family")

#: Name of the row that measures all vetoes together.
ALL = "all"


def veto_segments(vetoes: pd.DataFrame, analysed: Segments) -> dict[str, Segments]:
    """Give each veto's analysed time, in the order of their first rows."""
    return {
        str(name): analysed
        & Segments.from_arrays(
            rows["gps_start"].to_numpy(np.int64), rows["gps_end"].to_numpy(np.int64)
        )
        for name, rows in vetoes.groupby("veto", sort=False)
    }


def union_of(vetoes: Iterable[Segments]) -> Segments:
    """Give the time in any of some vetoes."""
    vetoes = list(vetoes)
    if not vetoes:
        return Segments.none()
    return Segments(
        np.concatenate([v.starts for v in vetoes]),
        np.concatenate([v.ends for v in vetoes]),
    )


def cost_of(
    vetoes: pd.DataFrame,
    strain: pd.DataFrame,
    *,
    analysed: Segments,
    parts: Iterable[pd.DataFrame] = (),
) -> pd.DataFrame:
    """Measure each veto and all together.

    Parameters
    ----------
    vetoes : pandas.DataFrame
        ``dq.tables.VETOES``; vetoes are measured in the order of their first row.
    strain : pandas.DataFrame
        ``dq.tables.TRANSIENTS``; transients whose peak was not analysed do not count.
    analysed : Segments
    parts : iterable of pandas.DataFrame, optional
        Further columns, measured elsewhere and indexed by the name of the veto:
        ``held_out``, ``signal_losses``, ``actuated_losses``, ``volume_time_columns``.

    Returns
    -------
    pandas.DataFrame
        ``dq.tables.VETO_COST``: one row per veto and the row ``all``. Fractions of
        nothing are missing. ``added_*`` count beyond the vetoes in the rows above,
        ``unique_*`` what no other row of the table has.

    Notes
    -----
    A veto of the same dead time that knew nothing would remove each transient with
    probability dead time / analysed time; ``p_value`` is the binomial chance of
    removing at least as many. Dead time is known without error, so the interval of
    efficiency over dead time is the exact one of the efficiency (Clopper & Pearson
    1934), divided.
    """
    import pandas as pd

    times = to_ns_array(strain["gps_time"].to_numpy(float))
    snr = strain["snr"].to_numpy(float)
    judged = analysed.contains(times)
    times, snr = times[judged], snr[judged]
    rows = []
    segments = veto_segments(vetoes, analysed)
    firsts = vetoes.drop_duplicates("veto").set_index("veto")
    alone = covered_once(list(segments.values()))
    shared = np.sum([s.contains(times) for s in segments.values()], axis=0)
    union, gone = Segments.none(), np.zeros(len(times), dtype=bool)
    for name, mine in segments.items():
        row = {k: firsts.loc[name, k] for k in _NAMED}
        row |= {"veto": name, **measure(mine, times, snr, analysed)}
        holds = mine.contains(times)
        row["added_dead_time_s"] = (mine - union).total_s
        row["added_removed"] = int(np.count_nonzero(holds & ~gone))
        row["unique_dead_time_s"] = (mine & alone).total_s
        row["unique_removed"] = int(np.count_nonzero(holds & (shared == 1)))
        union, gone = union | mine, gone | holds
        rows.append(row)
    total = {"veto": ALL, **measure(union, times, snr, analysed)}
    for kind in ("added", "unique"):
        total[f"{kind}_dead_time_s"] = total["dead_time_s"]
        total[f"{kind}_removed"] = total["removed"]
    table = pd.DataFrame([*rows, total])
    for part in parts:
        table = table.join(part, on="veto")
    return conform(table, VETO_COST)


def covered_once(vetoes: list[Segments]) -> Segments:
    """Give the time that exactly one of the vetoes covers."""
    if not vetoes:
        return Segments.none()
    starts = np.concatenate([v.starts for v in vetoes])
    ends = np.concatenate([v.ends for v in vetoes])
    edges, where = np.unique(np.concatenate([starts, ends]), return_inverse=True)
    step = np.bincount(where[: len(starts)], minlength=len(edges))
    depth = np.cumsum(step - np.bincount(where[len(starts) :], minlength=len(edges)))
    once = np.flatnonzero(depth == 1)
    return Segments(edges[once], edges[once + 1])


def measure(
    segments: Segments, times: np.ndarray, snr: np.ndarray, analysed: Segments
) -> dict:
    """Measure one list of segments.

    Parameters
    ----------
    segments : Segments
        Within analysed time.
    times : ndarray of int64
        Strain transients, nanoseconds.
    snr : ndarray
    analysed : Segments

    Returns
    -------
    dict
        The columns of ``dq.tables.VETO_COST`` that one list alone decides.
    """
    index = segments.index_of(times)
    holds = index >= 0
    removed = int(np.count_nonzero(holds))
    fraction = _share(segments.total_ns, analysed.total_ns)
    chance = 0.0 if np.isnan(fraction) else fraction
    efficiency = _share(removed, len(times))
    low, high = float("nan"), float("nan")
    if len(times):
        low, high = clopper_pearson(removed, len(times))
    return {
        "segments": len(segments),
        "dead_time_s": segments.total_ns / NS,
        "dead_time_fraction": fraction,
        "removed": removed,
        "efficiency": efficiency,
        "efficiency_snr8": _efficiency(holds, snr >= 8.0),
        "efficiency_snr20": _efficiency(holds, snr >= 20.0),
        "use_fraction": _share(len(np.unique(index[holds])), len(segments)),
        "expected_by_chance": len(times) * chance,
        "p_value": binomial_chance(removed, len(times), chance),
        "efficiency_over_dead_time": _share(efficiency, chance),
        "efficiency_over_dead_time_low": _share(low, chance),
        "efficiency_over_dead_time_high": _share(high, chance),
    }


def _efficiency(holds: np.ndarray, chosen: np.ndarray) -> float:
    return _share(np.count_nonzero(holds & chosen), np.count_nonzero(chosen))


def _share(part, whole) -> float:
    return float(part / whole) if whole else float("nan")
