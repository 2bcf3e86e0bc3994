"""From the channels' tables to witnesses, vetoes and their cost."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
import pandas as pd

from dq.config import Config
from dq.cost import cost_of
from dq.night.ledger import Ledger
from dq.segments import Segments, to_ns_array
from dq.tables import STRAIN_TRANSIENTS, conform
from dq.vetoes import build_vetoes, choose_vetoes
from dq.witnesses import find_witnesses, veto_windows


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
    refused : dict of str to str
        Vetoes that were built and not chosen, with the reason.
    """

    strain: pd.DataFrame
    witnesses: pd.DataFrame
    vetoes: pd.DataFrame
    cost: pd.DataFrame
    analysed: Segments
    refused: dict[str, str]


def judge(ledger: Ledger, config: Config) -> Verdict:
    """Find witnesses, choose vetoes within the dead-time budget, and cost them.

    Parameters
    ----------
    ledger : Ledger
    config : Config

    Returns
    -------
    Verdict
    """
    name = ledger.strain
    strain = ledger.transients[name]
    auxiliary = {k: v for k, v in ledger.transients.items() if k != name}
    judged = ledger.time("analysed")
    analysed = judged.pop(name)
    witnesses = find_witnesses(
        strain,
        auxiliary,
        analysed=analysed,
        auxiliary_analysed=judged,
        safety=ledger.safety,
        settings=config.witnesses,
    )
    built = build_vetoes(
        witnesses,
        auxiliary,
        ledger.faults(name),
        analysed=analysed,
        settings=config.vetoes,
    )
    chosen, refused = choose_vetoes(
        built,
        strain,
        analysed=analysed,
        max_dead_time=config.vetoes.max_dead_time,
    )
    vetoes = _in_order(built, chosen)
    cost = cost_of(vetoes, strain, analysed=analysed)
    table = strain_table(strain, witnesses, auxiliary, vetoes)
    if ledger.families is not None:
        table = table.assign(**{c: ledger.families[c].array for c in ledger.families})
    return Verdict(table, witnesses, vetoes, cost, analysed, refused)


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
        ``dq.tables.STRAIN_TRANSIENTS``; families are ``unsorted``.
    """
    times_ns = to_ns_array(strain["gps_time"].to_numpy(float))
    accepted = witnesses[witnesses["accepted"].fillna(False).astype(bool)]
    seen = {}
    for row in accepted.itertuples():
        windows = veto_windows(
            auxiliary[row.channel],
            snr_threshold=float(row.snr_threshold),
            half_window_s=float(row.half_window_s),
        )
        seen[row.channel] = windows.contains(times_ns)
    covered = {
        str(name): Segments.from_arrays(
            rows["gps_start"].to_numpy(np.int64), rows["gps_end"].to_numpy(np.int64)
        ).contains(times_ns)
        for name, rows in vetoes.groupby("veto", sort=False)
    }
    table = strain.assign(
        transient_id=transient_ids(strain),
        family="unsorted",
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
