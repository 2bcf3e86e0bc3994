"""Witnesses in their first form: each channel on its own, every trial counted.

For every auxiliary channel, every threshold of a ladder and every half-window of
another, the strain's transients inside the union of windows are counted. If the
channel had nothing to do with the strain, a fraction of them equal to the dead time
would fall inside (chance efficiency = dead time), so mu = N d, and ``significance`` is
the Poisson one of the coincidences (Smith et al. 2011, Class. Quantum Grav. 28 235005).

Bursts break the Poisson law, so the decision rests on ``calibrated_significance``: the
smallest of the Poisson significance of the coincidences, that of separate clusters of
transients, and that of the clusters widened by what circular shifts of the strain show
(``dq.witnesses.chance``). Shifts are only measured where the first two would accept;
they never raise a significance. One trial is one (channel, threshold, half-window)
that was tested, unsafe channels included; ``p_value`` is the calibrated chance times
all trials (Bonferroni), at most 1.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING

import numpy as np

from dq.segments import Segments, to_ns_array
from dq.tables import WITNESSES, conform
from dq.witnesses.ladder import (
    Combination,
    JointStrain,
    calibrate,
    climb,
    sorted_transients,
)

if TYPE_CHECKING:
    import pandas as pd

    from dq.config import Witnesses

_SAFETY = {"yes": "safe", "no": "unsafe", "": "cannot tell"}

#: Shifted counts this many times wider than Poisson's are worth a word.
_WIDE = 1.5


def find_witnesses(
    strain: pd.DataFrame,
    auxiliary: Mapping[str, pd.DataFrame],
    *,
    analysed: Segments,
    auxiliary_analysed: Mapping[str, Segments],
    safety: Mapping[str, str],
    settings: Witnesses,
    target: str = "all",
) -> pd.DataFrame:
    """Say which auxiliary channels witness the strain's transients.

    Parameters
    ----------
    strain : pandas.DataFrame
        Columns of ``dq.tables.TRANSIENTS``; ``gps_time`` and ``snr`` are read.
    auxiliary : mapping of str to pandas.DataFrame
        The same for each auxiliary channel.
    analysed : Segments
        Judged time of the strain.
    auxiliary_analysed : mapping of str to Segments
    safety : mapping of str to str
        ``yes``, ``no`` or empty, from the channel list. A channel marked ``no`` is
        measured and never accepted.
    settings : dq.config.Witnesses
    target : str
        Name of what was tested, for the table.

    Returns
    -------
    pandas.DataFrame
        ``dq.tables.WITNESSES``: one row per channel with its most significant
        combination; the accepted ones in order of ``significance``, then the rest in
        the same order, ties by name.
    """
    times = np.sort(to_ns_array(strain["gps_time"].to_numpy(float)))
    shared: dict[Segments, JointStrain] = {}
    best: dict[str, Combination | None] = {}
    joint = {
        n: analysed & auxiliary_analysed.get(n, Segments.none()) for n in auxiliary
    }
    trials = 0
    for name in sorted(auxiliary):
        best[name], tested = None, 0
        if joint[name]:
            if joint[name] not in shared:
                shared[joint[name]] = JointStrain(times, joint[name])
            here = shared[joint[name]]
            when, snr = sorted_transients(auxiliary[name])
            ladder = settings.ladder(name)
            best[name], tested = climb(here, when, snr, settings, ladder=ladder)
        trials += tested
    for name, found in best.items():
        if found and _p_value(found, trials) <= settings.false_alarm_probability:
            when, snr = sorted_transients(auxiliary[name])
            best[name] = calibrate(found, shared[joint[name]], when, snr)
    rows = []
    for name, found in best.items():
        row = {"channel": name, "target": target}
        row["safety"] = _SAFETY[safety.get(name, "")]
        if found is None:
            row["reason"] = _nothing(shared.get(joint[name]), auxiliary[name])
        else:
            row |= _measured(found, trials)
            row["reason"] = _objection(row, found, settings)
        rows.append(row)
    return _ordered(rows)


def _p_value(found: Combination, trials: int) -> float:
    return float(10.0 ** min(np.log10(trials) - found.sober, 0.0))


def _measured(found: Combination, trials: int) -> dict:
    return {
        "snr_threshold": found.threshold,
        "half_window_s": found.half_window_s,
        "coincidences": found.coincidences,
        "expected": found.expected,
        "significance": found.significance,
        "p_value": _p_value(found, trials),
        "efficiency": found.coincidences / found.total,
        "dead_time_s": found.dead_s,
        "use_fraction": found.windows_hit / found.windows,
        "clusters": found.clusters,
        "clusters_expected": found.clusters_expected,
        "dispersion": found.dispersion,
        "calibrated_significance": found.sober,
        "trials": trials,
    }


def _nothing(here: JointStrain | None, transients) -> str:
    if here is None:
        return "no jointly analysed time"
    if len(here.positions) == 0:
        return "no strain transients in jointly analysed time"
    if len(transients) == 0:
        return "no transients"
    return "no windows in jointly analysed time, or windows that fill it all"


def _objection(row: dict, found: Combination, settings) -> str:
    """Give the reason; fills ``accepted`` of the row."""
    p_value, trials = row["p_value"], row["trials"]
    bound = settings.false_alarm_probability
    wide = ""
    if found.dispersion > _WIDE:
        wide = f"; shifted counts scatter {found.dispersion:.1f} times Poisson"
    if row["safety"] == "unsafe":
        return "marked unsafe in the channel list: never used"
    if p_value > bound:
        return (
            f"not significant: p = {p_value:.2g} > {bound:g} over {trials} trials{wide}"
        )
    if found.separate < settings.min_coincidences:
        return (
            f"fewer than {settings.min_coincidences} separate coincidences: "
            f"{found.separate}"
        )
    row["accepted"] = True
    return f"accepted: p = {p_value:.2g} over {trials} trials{wide}"


def _ordered(rows: list[dict]) -> pd.DataFrame:
    import pandas as pd

    for row in rows:
        row.setdefault("accepted", False)
    rows = sorted(
        rows,
        key=lambda r: (not r["accepted"], -r.get("significance", -1.0), r["channel"]),
    )
    for number, row in enumerate(rows, start=1):
        row["order"] = number if row["accepted"] else None
    frame = pd.DataFrame(rows) if rows else pd.DataFrame({"channel": []})
    return conform(frame, WITNESSES)
