"""Whether a channel hears test signals, and so could veto a real one.

Test signals are actuated into the detector at known times. A channel that answers them
more often than its activity covers random times hears the strain: it is unsafe. One
that does not answer is only as safe as the number of test signals shows: with n of them
and none answered, a leak of up to the upper limit of 0 in n (Clopper & Pearson 1934,
Biometrika 26 404) could hide.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from dq.counting import binomial_chance, clopper_pearson
from dq.segments import NS, Segments, to_ns_array
from dq.witnesses.joint import Activity

SAFE, UNSAFE, UNCLEAR = "safe", "unsafe", "cannot tell"

#: What the channel list may say, as a verdict.
_LISTED = {"yes": SAFE, "no": UNSAFE}


@dataclass(frozen=True)
class Verdict:
    """What is known of a channel's safety.

    Attributes
    ----------
    safety : str
        ``safe``, ``unsafe`` or ``cannot tell``.
    reason : str
        In words; empty where nothing was measured or said.
    """

    safety: str
    reason: str = ""


def listed(word: str) -> Verdict | None:
    """Give the verdict of the channel list; None where it leaves the question open."""
    if word not in _LISTED:
        return None
    return Verdict(_LISTED[word], f"marked {_LISTED[word]} in the channel list")


def judge_safety(
    activity: Activity, judged: Segments, signals: np.ndarray, settings, ladder
) -> Verdict:
    """Judge a channel by its answers to test signals.

    Parameters
    ----------
    activity : Activity
    judged : Segments
        Time in which the channel was analysed.
    signals : ndarray of int64
        Times of test signals, nanoseconds.
    settings : dq.config.Witnesses
    ladder : list of float
        Thresholds tried, each a trial.

    Returns
    -------
    Verdict
    """
    signals = signals[judged.contains(signals)]
    count = len(signals)
    if not count:
        return Verdict(UNCLEAR, "no test signal in its time")
    reach = round(settings.safety_window_s * NS)
    smallest, answered, chance, tried, before = 1.0, 0, 0.0, 0, -1
    for threshold in ladder:
        loud = activity.snr >= threshold
        if np.count_nonzero(loud) in (0, before):
            continue
        before = int(np.count_nonzero(loud))
        tried += 1
        windows = judged & Segments.from_arrays(
            activity.start[loud] - reach, activity.end[loud] + reach
        )
        share = windows.total_ns / judged.total_ns
        hit = int(np.count_nonzero(windows.contains(signals)))
        p = binomial_chance(hit, count, share)
        if p < smallest or tried == 1:
            smallest, answered, chance = p, hit, share
    if tried and smallest * tried <= settings.false_alarm_probability:
        return Verdict(
            UNSAFE,
            f"answers {answered} of {count} test signals, {chance * count:.2g} by "
            f"chance: p = {min(smallest * tried, 1.0):.2g}",
        )
    loosest = _answers(activity, judged, signals, reach, ladder)
    leak = max(clopper_pearson(loosest[0], count)[1] - loosest[1], 0.0)
    told = (
        f"answers {loosest[0]} of {count} test signals, a leak of {leak:.0%} could hide"
    )
    if leak <= settings.safe_leak:
        return Verdict(SAFE, told)
    return Verdict(UNCLEAR, told)


def _answers(activity, judged, signals, reach: int, ladder) -> tuple[int, float]:
    """Give answers and their chance at the lowest threshold of the ladder."""
    loud = activity.snr >= ladder[0]
    windows = judged & Segments.from_arrays(
        activity.start[loud] - reach, activity.end[loud] + reach
    )
    share = windows.total_ns / judged.total_ns
    return int(np.count_nonzero(windows.contains(signals))), share


def without_signals(table, signals: np.ndarray, settings) -> np.ndarray:
    """Say which strain transients are no test signals.

    Parameters
    ----------
    table : pandas.DataFrame
        Columns ``gps_start`` and ``gps_end``.
    signals : ndarray of int64
    settings : dq.config.Witnesses

    Returns
    -------
    ndarray of bool
    """
    reach = round(settings.safety_window_s * NS)
    signals = np.sort(signals)
    start, end = (
        to_ns_array(table[c].to_numpy(float)) for c in ("gps_start", "gps_end")
    )
    after = np.searchsorted(signals, start - reach)
    return np.searchsorted(signals, end + reach) == after
