"""From the channels' tables to witnesses, vetoes and their cost."""

from __future__ import annotations

import logging
from collections.abc import Iterable
from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from dq.config import Config
from dq.cost import Selection, veto_segments
from dq.night.honest import Search, measure_vetoes
from dq.night.ledger import Ledger
from dq.segments import Segments, to_ns_array
from dq.tables import STRAIN_TRANSIENTS, conform
from dq.vetoes import Choice, build_vetoes, choose_vetoes
from dq.witnesses import find_witnesses, windows_of

log = logging.getLogger(__name__)


@dataclass(frozen=True)
class Verdict:
    """What the night says about the strain.

    Attributes
    ----------
    strain : pandas.DataFrame
        ``dq.tables.STRAIN_TRANSIENTS``.
    witnesses, vetoes, cost : pandas.DataFrame
        ``dq.tables.WITNESSES``, ``VETOES`` (chosen ones only) and ``VETO_COST``.
    analysed : Segments
        Judged time of the strain.
    choice : Choice
        How the vetoes were chosen, and the reasons against the others.
    volume : dict
        ``volume_time_ratio`` of the summary.
    """

    strain: pd.DataFrame
    witnesses: pd.DataFrame
    vetoes: pd.DataFrame
    cost: pd.DataFrame
    analysed: Segments
    choice: Choice
    volume: dict = field(default_factory=dict)


def judge(
    ledger: Ledger,
    config: Config,
    *,
    planted: pd.DataFrame | None = None,
    search: Search | None = None,
) -> Verdict:
    """Find witnesses, choose vetoes within the dead-time budget, and cost them.

    Parameters
    ----------
    ledger : Ledger
        Where the strain is sorted, families can be vetoed and weighed.
    config : Config
    planted : pandas.DataFrame, optional
        ``dq.tables.PLANTED``.
    search : Search, optional
        Triggers for the volume-time ratio; by default the strain's transients.

    Returns
    -------
    Verdict
    """
    strain = ledger.sorted_strain
    analysed = ledger.time("analysed")[ledger.strain]
    witnesses, built, choice = _decide(ledger, config, analysed)
    vetoes = _in_order(built, choice.chosen)
    _mention_absent_families(config, strain)

    def select(part: Segments) -> Selection:
        # slides cost most of the search, and a half would resolve less with them
        _, other, chosen = _decide(ledger, config, part, whole=analysed, slides=0)
        return Selection(veto_segments(other, analysed), chosen.chosen)

    cost, volume = measure_vetoes(
        vetoes,
        strain,
        select,
        analysed=analysed,
        settings=config.vetoes,
        planted=planted,
        search=search,
        signals=ledger.signals_ns,
    )
    table = strain_table(strain, witnesses, _auxiliary(ledger), vetoes)
    return Verdict(table, witnesses, vetoes, cost, analysed, choice, volume)


def _auxiliary(ledger: Ledger) -> dict[str, pd.DataFrame]:
    return {k: v for k, v in ledger.transients.items() if k != ledger.strain}


def _decide(
    ledger: Ledger,
    config: Config,
    part: Segments,
    *,
    whole: Segments | None = None,
    slides: int | None = None,
) -> tuple[pd.DataFrame, pd.DataFrame, Choice]:
    """Select witnesses, build vetoes and choose, from the strain within some time.

    The vetoes are built over all of the time ``whole``, but chosen by what they remove
    and cost within ``part``.
    """
    strain, auxiliary = ledger.sorted_strain, _auxiliary(ledger)
    judged = ledger.time("analysed")
    judged.pop(ledger.strain)
    witnesses = find_witnesses(
        strain,
        auxiliary,
        analysed=part,
        auxiliary_analysed=judged,
        safety=ledger.safety,
        settings=config.witnesses,
        injections=ledger.signals_ns,
        slides=slides,
    )
    built = build_vetoes(
        witnesses,
        auxiliary,
        ledger.faults(ledger.strain),
        analysed=part if whole is None else whole,
        settings=config.vetoes,
        strain=strain,
    )
    choice = choose_vetoes(
        built,
        strain,
        analysed=part,
        max_dead_time=config.vetoes.max_dead_time,
        weights=config.vetoes.weights,
        family_weights=config.vetoes.family_weights,
    )
    return witnesses, built, choice


def _mention_absent_families(config: Config, strain: pd.DataFrame) -> None:
    known = set(strain["family"].dropna()) if "family" in strain else set()
    for name in config.vetoes.strain_families:
        if name not in known:
            log.warning("no transient is sorted into family %r: no veto of it", name)


def _in_order(built: pd.DataFrame, chosen: list[str]) -> pd.DataFrame:
    """Keep the chosen vetoes, in the order of choice: ``added`` costs follow it."""
    place = built["veto"].map({name: i for i, name in enumerate(chosen)})
    order = np.argsort(place[place.notna()].to_numpy(int), kind="stable")
    return built[place.notna().to_numpy()].iloc[order].reset_index(drop=True)


def strain_table(
    strain: pd.DataFrame,
    witnesses: pd.DataFrame,
    auxiliary: dict[str, pd.DataFrame],
    vetoes: pd.DataFrame,
) -> pd.DataFrame:
    """Add to each strain transient its name, its witnesses and its vetoes.

    Parameters
    ----------
    strain : pandas.DataFrame
        ``dq.tables.TRANSIENTS``, sorted by time.
    witnesses, vetoes : pandas.DataFrame
    auxiliary : dict of str to pandas.DataFrame

    Returns
    -------
    pandas.DataFrame
        ``dq.tables.STRAIN_TRANSIENTS``; families are ``unsorted`` where
        the strain's table has none.
    """
    times_ns = to_ns_array(strain["gps_time"].to_numpy(float))
    accepted = witnesses[witnesses["accepted"].fillna(False).astype(bool)]
    seen: dict[str, np.ndarray] = {}
    for row in accepted.itertuples():
        # a channel may be a witness of several families, each with its own windows
        active = windows_of(row, auxiliary[row.channel]).contains(times_ns)
        seen[row.channel] = seen.get(row.channel, False) | active
    covered = {
        str(name): Segments.from_arrays(
            rows["gps_start"].to_numpy(np.int64), rows["gps_end"].to_numpy(np.int64)
        ).contains(times_ns)
        for name, rows in vetoes.groupby("veto", sort=False)
    }
    family = strain.get("family", "unsorted")
    table = strain.assign(
        transient_id=transient_ids(strain),
        family=family,
        witness=_joined(seen, len(strain)),
        veto=_joined(covered, len(strain)),
    )
    return conform(table, STRAIN_TRANSIENTS)


def transient_ids(strain: pd.DataFrame) -> list[str]:
    """Name each transient by its time and frequency.

    The name does not depend on the range of the night: nights that overlap name the
    same transient alike.
    """
    names: list[str] = []
    count: dict[str, int] = {}
    for time, frequency in zip(strain["gps_time"], strain["frequency_hz"], strict=True):
        name = f"{time:.6f}-{frequency:.1f}Hz"
        count[name] = count.get(name, 0) + 1
        names.append(name if count[name] == 1 else f"{name}-{count[name]}")
    return names


def _joined(flags: dict[str, np.ndarray], rows: int) -> list[str]:
    return [";".join(_set_in(flags, i)) for i in range(rows)]


def _set_in(flags: dict[str, np.ndarray], row: int) -> Iterable[str]:
    return (name for name, hit in flags.items() if hit[row])
