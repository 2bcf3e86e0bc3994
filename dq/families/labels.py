"""Hand labels: checked, matched to transients, settled between labellers."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from dq.errors import TrainingError
from dq.families.guard import RESERVED
from dq.families.scores import kappa

#: A label belongs to the nearest transient within this many seconds: a person's click
#: on a picture is good to a few tenths (own choice).
TOLERANCE_S = 0.5

#: What separates families in a cell of a table; no family name may hold it.
SEPARATOR = ";"


@dataclass(frozen=True)
class Matched:
    """Labels matched to transients.

    Attributes
    ----------
    matched : pandas.DataFrame
        One row per transient that has a label, in order of time: ``transient`` (row of
        the transients), ``gps_time`` (its time), ``family``, ``labellers`` (how many),
        ``agreed`` (share of them that said this family).
    unmatched : pandas.DataFrame
        The labels that were not used, with ``reason``.
    votes : pandas.DataFrame
        ``transient, labeller, family``: one row per labeller and transient.
    """

    matched: pd.DataFrame
    unmatched: pd.DataFrame
    votes: pd.DataFrame


def check_family(name: str) -> str:
    """Refuse a family name that no label may use.

    Raises
    ------
    TrainingError
    """
    if name in RESERVED:
        raise TrainingError(
            f"family {name!r} is reserved for what the sorter answers; leave such "
            "transients unlabelled or name the family"
        )
    if not name or SEPARATOR in name or name != name.strip() or not name.isprintable():
        raise TrainingError(
            f"family name {name!r} must be printable text without "
            f"{SEPARATOR!r} and without blanks at its ends"
        )
    return name


def match_labels(
    labels: pd.DataFrame, transients: pd.DataFrame, tolerance_s: float = TOLERANCE_S
) -> Matched:
    """Give each label to its nearest transient and settle between labellers.

    Parameters
    ----------
    labels : pandas.DataFrame
        Columns ``gps_time, family, labeller``; others are kept.
    transients : pandas.DataFrame
        Columns ``gps_time``, and ``gps_start, gps_end`` where known: a label inside a
        transient's own time is at distance 0.
    tolerance_s : float
        Seconds; farther labels stay unmatched.

    Returns
    -------
    Matched
        A labeller's later label of the same transient is set aside; among labellers the
        majority holds, and where they are even the one that stands first in the table.
    """
    families = labels["family"].astype(str)
    for name in families.unique():
        check_family(name)
    chosen, gap = _nearest(labels, transients)
    near = gap <= tolerance_s
    reason = np.where(
        near,
        "",
        [
            "no transient at all"
            if not np.isfinite(g)
            else f"nearest transient is {g:.3f} s away, more than {tolerance_s:g} s"
            for g in gap
        ],
    ).astype(object)
    votes = pd.DataFrame(
        {
            "transient": chosen,
            "labeller": labels["labeller"].astype(str).to_numpy(),
            "family": families.to_numpy(),
            "gap": gap,
            "row": np.arange(len(labels)),
        }
    )[near]
    votes = votes.sort_values(["transient", "gap", "row"], kind="stable")
    again = votes.duplicated(["transient", "labeller"], keep="first")
    said = votes[~again].set_index(["transient", "labeller"])["family"]
    for row in votes[again].itertuples():
        kept = said[(row.transient, row.labeller)]
        reason[row.row] = (
            f"{row.labeller} labelled this transient nearer to its time: {kept}"
        )
    votes = votes[~again].sort_values(["transient", "row"], kind="stable")
    unmatched = labels[reason != ""].copy()
    unmatched["reason"] = reason[reason != ""]
    votes = votes[["transient", "labeller", "family"]].reset_index(drop=True)
    return Matched(_settle(votes, transients), unmatched.reset_index(drop=True), votes)


def _nearest(labels, transients) -> tuple[np.ndarray, np.ndarray]:
    """Give for each label the transient's row and the seconds to it."""
    times = labels["gps_time"].to_numpy(float)
    peaks = transients["gps_time"].to_numpy(float)
    if not len(peaks):
        return np.full(len(times), -1), np.full(len(times), np.inf)
    if "gps_start" in transients and "gps_end" in transients:
        starts = transients["gps_start"].to_numpy(float)
        ends = transients["gps_end"].to_numpy(float)
    else:
        starts = ends = peaks
    chosen = np.empty(len(times), dtype=np.int64)
    gap = np.empty(len(times))
    for i, t in enumerate(times):
        outside = np.maximum(np.maximum(starts - t, t - ends), 0.0)
        # among transients that hold the label's time the nearer peak wins
        best = int(np.lexsort((np.abs(peaks - t), outside))[0])
        chosen[i], gap[i] = best, outside[best]
    return chosen, gap


def _settle(votes: pd.DataFrame, transients: pd.DataFrame) -> pd.DataFrame:
    rows = []
    times = transients["gps_time"].to_numpy(float)
    for transient, part in votes.groupby("transient", sort=True):
        counts = part["family"].value_counts()
        leading = set(counts[counts == counts.max()].index)
        family = next(f for f in part["family"] if f in leading)
        rows.append(
            {
                "transient": int(transient),
                "gps_time": float(times[int(transient)]),
                "family": family,
                "labellers": len(part),
                "agreed": float(counts[family] / len(part)),
            }
        )
    columns = ["transient", "gps_time", "family", "labellers", "agreed"]
    table = pd.DataFrame(rows, columns=columns)
    return table.sort_values("gps_time", kind="stable").reset_index(drop=True)


def labeller_agreement(votes: pd.DataFrame) -> pd.DataFrame:
    """Compare every two labellers on the transients that both labelled.

    Parameters
    ----------
    votes : pandas.DataFrame
        As in :class:`Matched`.

    Returns
    -------
    pandas.DataFrame
        ``first, second, both, agreed, kappa``; only pairs with common transients.
    """
    wide = votes.set_index(["transient", "labeller"])["family"].unstack()  # noqa: PD010
    names = list(wide.columns)
    rows = []
    for i, first in enumerate(names):
        for second in names[i + 1 :]:
            both = wide[[first, second]].dropna()
            if not len(both):
                continue
            families = sorted(set(both[first]) | set(both[second]))
            counts = pd.crosstab(both[first], both[second]).reindex(
                index=families, columns=families, fill_value=0
            )
            rows.append(
                {
                    "first": first,
                    "second": second,
                    "both": len(both),
                    "agreed": int(np.trace(counts.to_numpy())),
                    "kappa": kappa(counts.to_numpy()),
                }
            )
    return pd.DataFrame(rows, columns=["first", "second", "both", "agreed", "kappa"])
