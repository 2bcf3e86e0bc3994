"""The table of witnesses: which auxiliary channels explain the strain's transients.

Targets are all strain transients and, where they are sorted, each noise family by
itself; test signals are no noise and are never targets. Channels are scored at every
threshold and half-window (``score``), selected step by step (``select``), refused where
test signals show that they hear the strain (``safety``), and given a window of the
delay that was measured (``delay``).

``significance`` is Poisson's of the coincidences (Smith et al. 2011, Class. Quantum
Grav. 28 235005); the decision rests on ``calibrated_significance`` and ``p_value``.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING

import numpy as np

from dq.config import NEVER_VETOED
from dq.segments import Segments, to_ns_array
from dq.tables import WITNESSES, conform, kind_of, recordings_of
from dq.witnesses.delay import measured_window
from dq.witnesses.joint import Targets
from dq.witnesses.safety import (
    SAFE,
    UNCLEAR,
    UNSAFE,
    Verdict,
    judge_safety,
    listed,
    without_signals,
)
from dq.witnesses.score import Channels, Combination, Scores
from dq.witnesses.select import Chance, Selection, select

if TYPE_CHECKING:
    import pandas as pd

    from dq.config import Witnesses


#: Shifted counts this many times wider than Poisson's are worth a word, and slides that
#: score this many times what chance does.
_WIDE = 1.5

#: A channel that is there at this share of the loudest transients, of this SNR and at
#: least so many, whatever their family, may hear the strain itself (own choice).
_ALL_OF_THEM, _LOUD, _AT_LEAST = 0.8, 20.0, 10


def find_witnesses(
    strain: pd.DataFrame,
    auxiliary: Mapping[str, pd.DataFrame],
    *,
    analysed: Segments,
    auxiliary_analysed: Mapping[str, Segments],
    safety: Mapping[str, str],
    settings: Witnesses,
    injections: np.ndarray | None = None,
    slides: int | None = None,
) -> pd.DataFrame:
    """Say which auxiliary channels witness the strain's transients.

    Parameters
    ----------
    strain : pandas.DataFrame
        Columns of ``dq.tables.TRANSIENTS``, and ``family`` where they are sorted.
    auxiliary : mapping of str to pandas.DataFrame
        The same for each auxiliary channel.
    analysed : Segments
        Judged time of the strain.
    auxiliary_analysed : mapping of str to Segments
    safety : mapping of str to str
        ``yes``, ``no`` or empty, from the channel list; its word goes before what test
        signals say.
    settings : dq.config.Witnesses
    injections : ndarray of int64, optional
        Times of test signals, nanoseconds.
    slides : int, optional
        Circular slides that the highest score is held against; by default the
        configuration's.

    Returns
    -------
    pandas.DataFrame
        ``dq.tables.WITNESSES``: the accepted ones in order of selection, target by
        target, then the rest by significance, ties by name. For ``all`` every channel
        has a row; for a family those that reached significance.
    """
    signals = np.zeros(0, np.int64) if injections is None else np.sort(injections)
    strain = strain[without_signals(strain, signals, settings)]
    targets = make_targets(strain, analysed, settings.min_coincidences)
    channels = Channels(auxiliary, auxiliary_analysed, settings)
    verdicts = {n: _safety(n, channels, safety, signals) for n in sorted(auxiliary)}
    count = settings.slides if slides is None else slides
    first = channels.score(sorted(auxiliary), targets, analysed, slides=count)
    chance = Chance.after(first)
    allowed = [n for n, v in verdicts.items() if v.safety != UNSAFE]
    rows, decided = [], {}
    for name in targets.names:
        one = targets.only(name)
        picked = select(channels, allowed, one, analysed, first, chance)
        decided |= {(n, name): found for n, found in picked.decided.items()}
        rows += _rows(channels, one, analysed, first, chance, picked, verdicts)
    rates = _false_discovery(first, decided)
    for row in rows:
        row["q_value"] = rates.get((row["channel"], row["target"]), np.nan)
    _suspicious(rows, channels, strain, verdicts)
    return _ordered(rows)


def make_targets(strain: pd.DataFrame, analysed: Segments, fewest: int) -> Targets:
    """Give all transients and the noise families among them that are large enough."""
    times = to_ns_array(strain["gps_time"].to_numpy(float))
    group = np.full(len(times), -1)
    names = ["all"]
    if "family" in strain:
        family = strain["family"].fillna("").to_numpy(object)
        for name in sorted(set(family) - {"", *NEVER_VETOED}):
            mine = family == name
            if mine.sum() >= fewest:
                group[mine] = len(names) - 1
                names.append(str(name))
    return Targets.of(times, group, tuple(names), analysed)


def _safety(name: str, channels: Channels, safety, signals) -> Verdict:
    """Give a channel's verdict; a derived one is at most as safe as its recordings."""
    words = [listed(safety.get(r, "")) for r in recordings_of(name)]
    for verdict in words:
        if verdict is not None and verdict.safety == UNSAFE:
            return verdict
    if all(w is not None for w in words):
        return Verdict(SAFE, words[0].reason)
    judged = channels.judged.get(name, Segments.none())
    if not judged or not len(signals):
        return Verdict(UNCLEAR)
    settings = channels.settings
    return judge_safety(
        channels.activity(name), judged, signals, settings, settings.ladder(name)
    )


def _rows(
    channels: Channels,
    targets: Targets,
    analysed: Segments,
    first: Scores,
    chance: Chance,
    picked: Selection,
    verdicts: Mapping[str, Verdict],
) -> list[dict]:
    target = targets.names[0]
    alpha = channels.settings.false_alarm_probability
    steps = picked.chosen
    known = {n for n, _ in steps}
    rest = [(n, None) for n in sorted(channels.tables) if n not in known]
    rows = []
    before: set[str] = set()
    for name, step in [*steps, *rest]:
        again = name in before
        before.add(name)
        row = {
            "channel": name,
            "target": target,
            "safety": verdicts[name].safety,
            "kind": kind_of(name),
            "accepted": step is not None,
        }
        at_first = first.best.get((name, target))
        if at_first is None:
            row["reason"] = _nothing(name, channels, targets, first)
        else:
            found = step or picked.decided.get(name, at_first)
            whole = at_first
            if step is not None:
                whole = channels.measured(found, name, targets, analysed)
                row |= _window(channels, name, found, targets)
            row |= _measured(whole, found)
            row |= _chance(found, chance, name, target, again)
            row["redundant_with"] = picked.redundant.get(name, "")
            row["reason"] = _reason(
                row, found, picked, verdicts[name], channels, chance
            )
        strong = at_first is not None and (
            chance.of(at_first.sober, name, target) <= alpha
        )
        if target == "all" or strong:
            rows.append(row)
    return rows


def _chance(
    found: Combination, chance: Chance, name: str, target: str, again: bool
) -> dict:
    """Give chance and trials; where a witness comes again, only its own are trials."""
    if again:
        p, trials = chance.again, chance.own_trials(name, target)
    else:
        p, trials = chance.of, chance.trials
    return {"p_value": p(found.sober, name, target), "trials": trials}


def _measured(whole: Combination, found: Combination) -> dict:
    return {
        "snr_threshold": whole.threshold,
        "half_window_s": whole.half_window_s,
        "around": whole.around,
        "coincidences": whole.coincidences,
        "expected": whole.expected,
        "significance": whole.significance,
        "efficiency": whole.coincidences / whole.total if whole.total else np.nan,
        "dead_time_s": whole.dead_s,
        "use_fraction": whole.windows_hit / max(whole.windows, 1),
        "clusters": whole.clusters,
        "clusters_expected": whole.clusters_expected,
        "dispersion": found.dispersion,
        "calibrated_significance": found.sober,
    }


def _window(channels: Channels, name: str, found: Combination, targets) -> dict:
    """Give the window of an accepted witness; slow activity has no delay to measure."""
    window = (0.0, found.half_window_s, found.half_window_s)
    if kind_of(name) == "transients":
        window = measured_window(
            channels.activity(name).around(found.around),
            targets.times,
            threshold=found.threshold,
            half_window_s=found.half_window_s,
            ladder_s=channels.settings.half_windows_s,
        )
    return dict(zip(("delay_s", "before_s", "after_s"), window, strict=True))


def _nothing(name: str, channels: Channels, targets: Targets, first: Scores) -> str:
    if not first.joint_s.get(name):
        return "no jointly analysed time"
    if not len(channels.tables[name]):
        return "no transients"
    if not len(targets.times):
        return "no strain transients in jointly analysed time"
    return "no windows in jointly analysed time, or windows that fill most of it"


def _reason(
    row, found: Combination, picked: Selection, verdict, channels, chance: Chance
) -> str:
    settings, p = channels.settings, row["p_value"]
    divisor = chance.divisor_of(row["channel"], row["target"])
    told = f"; {verdict.reason}" if verdict.reason else ""
    if found.dispersion > _WIDE:
        told += f"; shifted counts scatter {found.dispersion:.1f} times Poisson"
    if divisor > _WIDE:
        told += (
            f"; in slides it scores up to {divisor:.1f} times what chance does, as "
            "where strain and channel share a rhythm or swells"
        )
    over = f"p = {p:.2g} over {row['trials']} trials"
    if verdict.safety == UNSAFE:
        return f"unsafe, never used: {verdict.reason}"
    if row["accepted"] and row["trials"] < chance.trials:
        return f"accepted again, with further windows: {over} of its own{told}"
    if row["accepted"]:
        return f"accepted: {over}{told}"
    if row["redundant_with"]:
        return f"nothing left once {row['redundant_with']} is used{told}"
    if row["channel"] in picked.thin:
        return (
            f"fewer than {settings.min_coincidences} separate coincidences: "
            f"{found.separate}{told}"
        )
    bound = settings.false_alarm_probability
    return f"not significant: p = {p:.2g} > {bound:g} over {row['trials']} trials{told}"


def _suspicious(rows, channels: Channels, strain, verdicts) -> None:
    """Warn of witnesses that are there at nearly all loud transients of every kind."""
    loud = strain[strain["snr"] >= _LOUD]
    if len(loud) < _AT_LEAST:
        return
    times = to_ns_array(loud["gps_time"].to_numpy(float))
    for row in rows:
        if not row["accepted"] or row["target"] != "all":
            continue
        if verdicts[row["channel"]].safety == SAFE:
            continue
        near = channels.activity(row["channel"]).around(row["around"])
        half = round(row["half_window_s"] * 1e9)
        strong = near.snr >= row["snr_threshold"]
        windows = Segments.from_arrays(
            near.start[strong] - half, near.end[strong] + half
        )
        share = float(np.mean(windows.contains(times)))
        if share >= _ALL_OF_THEM:
            row["reason"] += (
                f"; suspicious: active at {share:.0%} of the strain's loudest "
                "transients whatever their kind, as a channel that hears the strain is"
            )


def _ordered(rows: list[dict]) -> pd.DataFrame:
    import pandas as pd

    accepted = [r for r in rows if r["accepted"]]
    rest = [r for r in rows if not r["accepted"]]
    rest.sort(key=lambda r: (-r.get("significance", -1.0), r["channel"], r["target"]))
    rows = [*accepted, *rest]
    for number, row in enumerate(rows, start=1):
        row["order"] = number if row["accepted"] else None
    frame = pd.DataFrame(rows) if rows else pd.DataFrame({"channel": []})
    return conform(frame, WITNESSES)


def _false_discovery(first: Scores, decided: Mapping) -> dict:
    """Give the false-discovery rate at which each channel and target would be called.

    Benjamini & Hochberg 1995, J. R. Stat. Soc. B 57 289, over all channels and targets
    that were tested, each with its own trials counted first.
    """
    from scipy.stats import false_discovery_control

    keys = list(first.best)
    score = np.array([decided.get(k, first.best[k]).sober for k in keys])
    tested = np.array([first.tested[k] for k in keys])
    own = np.minimum(tested * 10.0**-score, 1.0)
    return dict(zip(keys, false_discovery_control(own), strict=True))
