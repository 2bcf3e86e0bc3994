"""A whole night's truth, and what somebody who knows it would veto.

Part of ``night_truth.py``, which says what the oracles are.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from itertools import product

import numpy as np
import pandas as pd

from dq.config import Witnesses
from dq.report.night_tables import NightTables
from dq.segments import Segments, to_ns_array
from dq.tables import VETOES, conform
from dq.vetoes import choose_vetoes
from dq.witnesses.windows import veto_windows

#: s; the oracle's window beyond a row's extent, and what a strain transient's peak may
#: lie outside the true extent.
SIDE_S, NEAR_S = 0.05, 0.1

#: Share of the channel oracle's transients that the thrifty one keeps of a coupling.
KEPT = 0.95

BAFFLE = "OV-BAFFLE-POS"


@dataclass
class Truth:
    """A night's tables and its truth.

    Attributes
    ----------
    night : NightTables
    rows : dict of str to pandas.DataFrame
        Transients of every channel.
    events : pandas.DataFrame
        ``truth/transients.csv``, ``seen_by`` split.
    couplings : pandas.DataFrame
        ``truth/couplings.csv``.
    own : ndarray of int
        For each strain transient the number of its event, or -1.
    """

    night: NightTables
    rows: dict[str, pd.DataFrame]
    events: pd.DataFrame
    couplings: pd.DataFrame
    own: np.ndarray

    @property
    def analysed(self) -> Segments:
        """Analysed time of the strain."""
        return self.night.time("analysed")

    @property
    def times(self) -> np.ndarray:
        """Times of the strain's transients, nanoseconds."""
        return to_ns_array(self.night.strain["gps_time"].to_numpy(float))

    @property
    def families(self) -> np.ndarray:
        """True family of each strain transient; empty where none was planted."""
        names = np.append(self.events["family"].to_numpy(str), "")
        return names[self.own]

    @property
    def witnessed(self) -> np.ndarray:
        """Strain transients of families that some channel hears."""
        return np.isin(self.families, self.couplings["family"].unique())

    def heard(self, witness: str) -> pd.DataFrame:
        """Give the events that a witness heard."""
        return self.events[[witness in seen for seen in self.events["seen_by"]]]


def events_of(strain: pd.DataFrame, events: pd.DataFrame) -> np.ndarray:
    """Give for each strain transient the number of its true event, or -1."""
    at = strain["gps_time"].to_numpy(float)[:, None]
    low, high, peak = (
        events[c].to_numpy(float) for c in ("gps_start", "gps_end", "gps_time")
    )
    inside = (at >= low - NEAR_S) & (at <= high + NEAR_S)
    away = np.where(inside, np.abs(at - peak), np.inf)
    return np.where(inside.any(axis=1), away.argmin(axis=1), -1)


def table_of(coupling, rows: dict[str, pd.DataFrame]) -> pd.DataFrame:
    """Give the rows in which a coupling's channel shows what it hears."""
    name = coupling.witness
    return rows[f"{BAFFLE}@fringe-n4" if name == BAFFLE else name]


def loud_enough(truth: Truth, coupling) -> tuple[np.ndarray, float] | None:
    """Say which of a channel's rows are true events, and from which SNR all are kept.

    None where the channel shows no event that it heard.
    """
    table = table_of(coupling, truth.rows)
    low = table["gps_start"].to_numpy(float) + coupling.delay_s - SIDE_S
    high = table["gps_end"].to_numpy(float) + coupling.delay_s + SIDE_S
    snr = table["snr"].to_numpy(float)
    mine, loudest = np.zeros(len(table), dtype=bool), []
    for event in truth.heard(coupling.witness).itertuples():
        over = (low < event.gps_end) & (high > event.gps_start)
        if over.any():
            loudest.append(snr[over].max())
        mine |= over
    return (mine, float(min(loudest))) if loudest else None


def oracle(truth: Truth, kind: str) -> dict[str, Segments]:
    """Give the windows of somebody who knows the couplings, by channel.

    ``kind`` is ``channel``, ``event`` or ``thrifty``.
    """
    out = {}
    for coupling in truth.couplings.itertuples():
        known = loud_enough(truth, coupling)
        if known is None:
            continue
        table = table_of(coupling, truth.rows)
        options = {"delay_s": coupling.delay_s, "snr_threshold": known[1]}
        if kind == "event":
            table = table[known[0]]
        windows = veto_windows(table, before_s=SIDE_S, after_s=SIDE_S, **options)
        if kind == "thrifty":
            times = truth.times[truth.families == coupling.family]
            windows = _least(table, times[windows.contains(times)], windows, options)
        out[coupling.witness] = truth.analysed & windows
    return _needed(truth, out) if kind == "thrifty" else out


def _least(table, times, windows: Segments, options: dict) -> Segments:
    """Give the shortest windows of the ladder that hold most of some transients."""
    settings = Witnesses()
    ladder = [options["snr_threshold"], *settings.snr_thresholds]
    for threshold, around, half in product(
        ladder, ("activity", "peak"), settings.half_windows_s
    ):
        tried = veto_windows(
            table,
            snr_threshold=threshold,
            before_s=half,
            after_s=half,
            delay_s=options["delay_s"],
            around=around,
        )
        kept = np.count_nonzero(tried.contains(times))
        if kept >= KEPT * len(times) and tried.total_s < windows.total_s:
            windows = tried
    return windows


def _needed(truth: Truth, windows: dict[str, Segments]) -> dict[str, Segments]:
    """Leave out channels beside which the others remove the same, longest first."""
    times = truth.times[truth.witnessed]
    kept = dict(windows)
    for name in sorted(windows, key=lambda n: -windows[n].total_s):
        others = union(w for n, w in kept.items() if n != name)
        if others.contains(times).sum() == union(kept.values()).contains(times).sum():
            del kept[name]
    return kept


def chosen_of(truth: Truth, windows: dict[str, Segments]) -> Segments:
    """Choose among an oracle's windows as the night chooses among its own."""
    parts = [
        pd.DataFrame({"gps_start": s.starts, "gps_end": s.ends}).assign(
            veto=name, category=3, source="witness", channel=name, family=""
        )
        for name, s in windows.items()
    ]
    choice = choose_vetoes(
        conform(pd.concat(parts, ignore_index=True), VETOES),
        truth.night.strain,
        analysed=truth.analysed,
        max_dead_time=truth.night.manifest["config"]["vetoes"]["max_dead_time"],
    )
    return union(windows[name] for name in choice.chosen)


def union(parts: Iterable[Segments]) -> Segments:
    """Give the time in any part."""
    out = Segments.none()
    for part in parts:
        out |= part
    return out
