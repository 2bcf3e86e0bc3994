"""Witnesses step by step: the most significant first, what it explains removed.

Smith et al. 2011, Class. Quantum Grav. 28 235005. After each step the chosen channel's
windows leave the analysed time and its targets leave the targets; all are scored anew
on what is left, itself with other thresholds and windows too, until none is
significant. A channel that only repeats a better one has nothing left and is named
redundant with it.

A channel that was chosen may be chosen again, with windows for the fainter or the later
of what it hears. That it is a witness was decided then, so only its own combinations
are trials now: a wrong choice costs dead time, it names no wrong witness.

Two chances are held against a score s. The conservative one counts every combination of
every channel and target as a trial (Bonferroni); a channel that may be accepted is
first held against circular shifts of its own (``dq.witnesses.chance``). The other looks
at the highest score of all combinations in each of many circular slides of the strain:
where n of K slides reach s it is (n + 1) / (K + 1), whatever rhythm or clumping the
channels have. The larger of the two decides where a slide reaches s at all. A channel
whose slides score far above chance is measured by them, so it does not hide others.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

from dq.segments import NS, Segments
from dq.witnesses.joint import Targets
from dq.witnesses.score import Channels, Combination, Scores

#: Channels whose first chance is above this are not scored again: what others explain
#: only takes targets away from them.
LOOSE = 0.5


@dataclass(frozen=True)
class Chance:
    """From a score to its chance over all that was tried.

    Attributes
    ----------
    trials : int
    loudest : ndarray
        Highest score of each slide; empty without slides.
    divisor, tested : dict of (str, str) to number
        Of a channel's scores for a target, before they are held against the slides;
        combinations tested, as of ``Scores``.
    """

    trials: int
    loudest: np.ndarray
    divisor: Mapping[tuple[str, str], float] = field(default_factory=dict)
    tested: Mapping[tuple[str, str], int] = field(default_factory=dict)

    @classmethod
    def after(cls, first: Scores) -> Chance:
        """Give the chance of scores by what a pass over all channels met."""
        trials = sum(first.tested.values())
        return cls(trials, first.loudest, first.divisor, first.tested)

    def of(self, score: float, channel: str, target: str) -> float:
        """Give the chance of a score this high anywhere, reached by this channel."""
        measured = score / self.divisor_of(channel, target)
        reached = int(np.count_nonzero(self.loudest >= measured))
        least = (reached + 1) / (len(self.loudest) + 1)
        if reached:
            return max(_counted(score, self.trials), least)
        # where its own slides score above chance, the formula's word is not enough
        counted = min(_counted(measured, self.trials), least)
        return max(_counted(score, self.trials), counted)

    def again(self, score: float, channel: str, target: str) -> float:
        """Give the chance of a further score of a channel that is a witness already."""
        measured = score / self.divisor_of(channel, target)
        return _counted(measured, self.own_trials(channel, target))

    def own_trials(self, channel: str, target: str) -> int:
        """Give the number of combinations of a channel that a target was tried with."""
        return self.tested.get((channel, target), 1)

    def divisor_of(self, channel: str, target: str) -> float:
        """Give what a channel's scores for a target are divided by; 1 is usual."""
        return self.divisor.get((channel, target), 1.0)


def _counted(score: float, trials: int) -> float:
    """Give the chance by formula, every combination counted as a trial."""
    return float(10.0 ** min(np.log10(max(trials, 1)) - score, 0.0))


@dataclass
class Selection:
    """What the steps for one target came to.

    Attributes
    ----------
    chosen : list of (str, Combination)
        In order, as scored when chosen.
    decided : dict of str to Combination
        Last score of the channels that were looked at closely.
    redundant : dict of str to str
        Channels that were significant before the named one was chosen.
    thin : set of str
        Significant, but with too few separate coincidences.
    """

    chosen: list[tuple[str, Combination]] = field(default_factory=list)
    decided: dict[str, Combination] = field(default_factory=dict)
    redundant: dict[str, str] = field(default_factory=dict)
    thin: set[str] = field(default_factory=set)


def select(
    channels: Channels,
    names: list[str],
    targets: Targets,
    analysed: Segments,
    first: Scores,
    chance: Chance,
) -> Selection:
    """Select the witnesses of one target.

    Parameters
    ----------
    channels : Channels
    names : list of str
        Channels that may be chosen.
    targets : Targets
        One target.
    analysed : Segments
    first : Scores
        Of all channels over all of the time.
    chance : Chance

    Returns
    -------
    Selection
    """
    alpha = channels.settings.false_alarm_probability
    fewest = channels.settings.min_coincidences
    target = targets.names[0]
    out, calibrated = Selection(), set()
    witnesses: set[str] = set()

    def p_of(name: str, found: Combination) -> float:
        known = chance.again if name in witnesses else chance.of
        return known(found.sober, name, target)

    now = {
        name: found
        for name in names
        if (found := first.best.get((name, target))) is not None
        and p_of(name, found) <= LOOSE
    }
    was = {n for n, found in now.items() if p_of(n, found) <= alpha}
    while open_ := [n for n, found in now.items() if p_of(n, found) <= alpha]:
        # a higher score that its own slides explain must not stand before these
        name = max(open_, key=lambda n: (now[n].sober, -now[n].dead_s, n))
        found = now[name]
        if name not in calibrated:
            calibrated.add(name)
            now[name] = channels.calibrate(found, name, targets, analysed)
            out.decided[name] = now[name]
            continue
        if found.separate < fewest:
            del now[name]
            out.thin.add(name)
            continue
        out.chosen.append((name, found))
        witnesses.add(name)
        analysed = analysed - _windows(channels, name, found)
        targets = targets.within(analysed)
        again = channels.score(sorted(now), targets, analysed)
        now = {
            n: again.best[n, target] for n in sorted(now) if (n, target) in again.best
        }
        calibrated.clear()
        left = {n for n, f in now.items() if p_of(n, f) <= alpha}
        for other in was - left - witnesses:
            if other not in out.thin:
                out.redundant.setdefault(other, name)
        was = left
    return out


def _windows(channels: Channels, name: str, found: Combination) -> Segments:
    activity = channels.activity(name).around(found.around)
    loud = activity.snr >= found.threshold
    half = round(found.half_window_s * NS)
    return Segments.from_arrays(activity.start[loud] - half, activity.end[loud] + half)
