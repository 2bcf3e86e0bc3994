"""What vetoes cost and what they remove, for any list of segments."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from dq.counting import binomial_chance
from dq.segments import Segments, to_ns_array
from dq.tables import VETO_COST, conform

if TYPE_CHECKING:
    import pandas as pd


def cost_of(
    vetoes: pd.DataFrame, strain: pd.DataFrame, *, analysed: Segments
) -> pd.DataFrame:
    """Measure each veto and all together.

    Parameters
    ----------
    vetoes : pandas.DataFrame
        ``dq.tables.VETOES``; vetoes are measured in the order of their first row.
    strain : pandas.DataFrame
        ``dq.tables.TRANSIENTS``; transients whose peak was not analysed do not count.
    analysed : Segments

    Returns
    -------
    pandas.DataFrame
        ``dq.tables.VETO_COST``: one row per veto and the row ``all``. Fractions of
        nothing are missing. ``added_*`` count beyond the vetoes in the rows above;
        held-out and signal-loss columns stay empty until they are measured.

    Notes
    -----
    A veto of the same dead time that knew nothing would remove each transient with
    probability dead time / analysed time; ``p_value`` is the binomial chance of
    removing at least as many.
    """
    import pandas as pd

    times = to_ns_array(strain["gps_time"].to_numpy(float))
    snr = strain["snr"].to_numpy(float)
    judged = analysed.contains(times)
    times, snr = times[judged], snr[judged]
    rows = []
    union, gone = Segments.none(), np.zeros(len(times), dtype=bool)
    for name, part in vetoes.groupby("veto", sort=False):
        segments = analysed & Segments.from_arrays(
            part["gps_start"].to_numpy(np.int64), part["gps_end"].to_numpy(np.int64)
        )
        first = part.iloc[0]
        row = {k: first[k] for k in ("category", "source", "channel", "family")}
        row |= {"veto": name, **measure(segments, times, snr, analysed)}
        holds = segments.contains(times)
        row["added_dead_time_s"] = (segments - union).total_s
        row["added_removed"] = int(np.count_nonzero(holds & ~gone))
        union, gone = union | segments, gone | holds
        rows.append(row)
    total = {"veto": "all", **measure(union, times, snr, analysed)}
    total["added_dead_time_s"] = total["dead_time_s"]
    total["added_removed"] = total["removed"]
    return conform(pd.DataFrame([*rows, total]), VETO_COST)


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
    return {
        "segments": len(segments),
        "dead_time_s": segments.total_s,
        "dead_time_fraction": fraction,
        "removed": removed,
        "efficiency": _share(removed, len(times)),
        "efficiency_snr8": _efficiency(holds, snr >= 8.0),
        "efficiency_snr20": _efficiency(holds, snr >= 20.0),
        "use_fraction": _share(len(np.unique(index[holds])), len(segments)),
        "expected_by_chance": len(times) * chance,
        "p_value": binomial_chance(removed, len(times), chance),
    }


def _efficiency(holds: np.ndarray, chosen: np.ndarray) -> float:
    return _share(np.count_nonzero(holds & chosen), np.count_nonzero(chosen))


def _share(part, whole) -> float:
    return float(part / whole) if whole else float("nan")
