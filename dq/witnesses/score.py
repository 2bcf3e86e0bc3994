"""Every threshold and window of many channels against every target.

A combination is one (channel, target, threshold, half-window). Its score is the smaller
of two significances: Poisson's for the coincidences, and that for clusters of targets
met by the windows against the most that chance meets (``dq.witnesses.chance``). The
second is worked out only where the first could matter; below ``PLAIN`` the first stands
alone, which for shifted targets errs to the safe side.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, replace

import numpy as np

from dq.counting import poisson_significance
from dq.segments import NS, Segments
from dq.witnesses.chance import (
    calibrated_significance,
    clusters_expected,
    own_measure,
    shifted_counts,
)
from dq.witnesses.joint import ACTIVITY, PEAK, Activity, Joint, Targets
from dq.witnesses.kernel import count_windows
from dq.witnesses.windows import hits

#: Plain significance from which on clusters are looked at. The loudest of a thousand
#: trials reaches 3 by chance; a night has many more.
PLAIN = 3.0

#: Windows that cover more than this share of the joint time say nothing about the rest
#: (own choice).
MOST_DEAD = 0.5

#: Channels counted at a time: their shifted counts take some ten MiB.
TOGETHER = 32


@dataclass(frozen=True)
class Combination:
    """A channel at one threshold and half-window against one target.

    Attributes
    ----------
    threshold : float
    around : str
        What the windows lie around: the channel's activity, or its peaks alone.
    half_window_s : float
    coincidences, total : int
        Target transients in the windows, and in the joint time.
    expected : float
        By chance: all of them times the fraction of dead time.
    clusters : int
    clusters_expected : float
        The same for clusters of transients, at most.
    dead_s, joint_s : float
    significance : float
        Of the coincidences, by Poisson's law.
    sober : float
        The smallest of the significances measured so far.
    dispersion : float
        Of the shifted counts; not a number until measured.
    windows, windows_hit : int
    """

    threshold: float
    around: str
    half_window_s: float
    coincidences: int
    total: int
    expected: float
    clusters: int
    clusters_expected: float
    dead_s: float
    joint_s: float
    significance: float
    sober: float
    dispersion: float = float("nan")
    windows: int = 0
    windows_hit: int = 0

    @property
    def separate(self) -> int:
        """Coincidences that share neither a window nor a cluster."""
        return min(self.clusters, self.windows_hit)


@dataclass
class Scores:
    """What a pass over the channels found.

    Attributes
    ----------
    best : dict of (str, str) to Combination
        The best combination of a channel for a target; absent where none was tested.
    tested : dict of (str, str) to int
        Combinations tested.
    loudest : ndarray, shape (n_slides,)
        For each shift of the targets the highest score of any combination, each
        measured in its channel's own (``dq.witnesses.chance.own_measure``).
    divisor : dict of (str, str) to float
        What the scores of a channel for a target are divided by before they are held
        against these; absent without slides.
    joint_s : dict of str to float
        Jointly analysed time of each channel, s.
    """

    best: dict[tuple[str, str], Combination] = field(default_factory=dict)
    tested: dict[tuple[str, str], int] = field(default_factory=dict)
    loudest: np.ndarray = field(default_factory=lambda: np.zeros(0))
    divisor: dict[tuple[str, str], float] = field(default_factory=dict)
    joint_s: dict[str, float] = field(default_factory=dict)


class Channels:
    """The channels that may be witnesses, as arrays.

    Parameters
    ----------
    tables : mapping of str to pandas.DataFrame
        Columns of ``dq.tables.TRANSIENTS``.
    judged : mapping of str to Segments
    settings : dq.config.Witnesses
    """

    def __init__(self, tables: Mapping, judged: Mapping[str, Segments], settings):
        self.tables = tables
        self.judged = judged
        self.settings = settings
        #: What windows lie around, and how far they reach beyond, s.
        self.kinds = [(a, h) for a in (ACTIVITY, PEAK) for h in settings.half_windows_s]

    def activity(self, name: str) -> Activity:
        """Give a channel's activity."""
        return Activity.of(self.tables[name])

    def score(
        self,
        names: Iterable[str],
        targets: Targets,
        analysed: Segments,
        *,
        slides: int = 0,
    ) -> Scores:
        """Score channels against targets within the strain's analysed time."""
        scores = Scores(loudest=np.zeros(slides))
        alike: dict[Segments, list[str]] = {}
        for name in names:
            time = analysed & self.judged.get(name, Segments.none())
            scores.joint_s[name] = time.total_s
            if time:
                alike.setdefault(time, []).append(name)
        for time, members in alike.items():
            joint = Joint(targets, time, slides)
            if not len(joint.targets.times):
                continue
            for first in range(0, len(members), TOGETHER):
                self._score_some(members[first : first + TOGETHER], joint, scores)
        return scores

    def _score_some(self, names: list[str], joint: Joint, scores: Scores) -> None:
        active = [self.activity(n) for n in names]
        ladders = [self.settings.ladder(n) for n in names]
        ladder = np.full((len(names), max(map(len, ladders))), np.nan)
        for row, values in zip(ladder, ladders, strict=True):
            row[: len(values)] = values
        halves = self.settings.half_windows_s
        below = [np.full(len(active), np.iinfo(np.int64).max), _mean_lengths(active)]
        parts = [
            _counted([a.around(what) for a in active], joint, ladder, halves, limit)
            for what, limit in zip((ACTIVITY, PEAK), below, strict=True)
        ]
        dead, found, met = (np.concatenate(x, axis=2) for x in zip(*parts, strict=True))
        sober = _scores(joint, active, ladder, self.kinds, dead, found, met)
        if len(scores.loudest):
            self._slide_scores(names, joint, dead, sober, scores)
        for c, name in enumerate(names):
            for m, target in enumerate(joint.targets.names):
                tests = int(np.count_nonzero(dead[c] >= 0)) if joint.counts[m] else 0
                scores.tested[name, target] = tests
                if tests:
                    scores.best[name, target] = self._best(
                        joint, active[c], ladder[c], m, (dead, found, met, sober), c
                    )

    def _slide_scores(self, names, joint, dead, sober, scores: Scores) -> None:
        """Note what the slides reach, each channel's scores in their own measure."""
        tests = np.count_nonzero(dead >= 0, axis=(1, 2))
        measured, divisor = own_measure(sober.max(axis=(1, 2)), tests)
        highest = measured[:, 1:].max(axis=(0, 2))
        np.maximum(scores.loudest, highest, out=scores.loudest)
        for name, row in zip(names, divisor.tolist(), strict=True):
            for target, value in zip(joint.targets.names, row, strict=True):
                scores.divisor[name, target] = value

    def _best(self, joint, activity, ladder, m: int, counted, c: int) -> Combination:
        """Give the highest score; of equal ones the least dead time."""
        dead, found, met, sober = (x[c] for x in counted)
        score, cost = sober[..., 0, m], dead / NS
        tested = dead >= 0
        order = np.lexsort((cost[tested], -score[tested]))
        t, w = np.argwhere(tested)[order[0]]
        threshold, (what, half) = float(ladder[t]), self.kinds[w]
        low, high = joint.windows(activity.around(what), threshold, half)
        where = hits(joint.positions[m], low, high)
        expected = joint.counts[m] * dead[t, w] / joint.total
        count = int(found[t, w, 0, m])
        most = _most_clusters(joint, m, low, high)
        grouped = float(poisson_significance(met[t, w, 0, m], most))
        return Combination(
            threshold=threshold,
            around=what,
            half_window_s=half,
            coincidences=count,
            total=int(joint.counts[m]),
            expected=float(expected),
            clusters=int(met[t, w, 0, m]),
            clusters_expected=most,
            dead_s=float(cost[t, w]),
            joint_s=joint.total / NS,
            significance=float(poisson_significance(count, expected)),
            sober=min(float(score[t, w]), grouped),
            windows=len(low),
            windows_hit=len(np.unique(where[where >= 0])),
        )

    def _windows(self, joint: Joint, name: str, found: Combination):
        activity = self.activity(name).around(found.around)
        return joint.windows(activity, found.threshold, found.half_window_s)

    def measured(
        self, found: Combination, name: str, targets: Targets, analysed: Segments
    ) -> Combination:
        """Give a combination as it stands over all of some analysed time."""
        joint = Joint(targets, analysed & self.judged[name])
        low, high = self._windows(joint, name, found)
        where = hits(joint.positions[0], low, high)
        inside = where >= 0
        dead, total = int(np.sum(high - low)), len(where)
        met = np.logical_or.reduceat(inside, joint.first[0]) if total else inside
        expected = total * dead / joint.total
        return replace(
            found,
            coincidences=int(inside.sum()),
            total=total,
            expected=expected,
            clusters=int(met.sum()),
            clusters_expected=_most_clusters(joint, 0, low, high),
            dead_s=dead / NS,
            joint_s=joint.total / NS,
            significance=float(poisson_significance(inside.sum(), expected)),
            windows=len(low),
            windows_hit=len(np.unique(where[inside])),
        )

    def calibrate(
        self, found: Combination, name: str, targets: Targets, analysed: Segments
    ) -> Combination:
        """Hold a combination against many more shifts; never raises its score."""
        joint = Joint(targets, analysed & self.judged[name])
        low, high = self._windows(joint, name, found)
        shifted = shifted_counts(
            joint.positions[0], joint.first[0], low, high, joint.total
        )
        most = _most_clusters(joint, 0, low, high)
        significance, wide = calibrated_significance(found.clusters, most, shifted)
        return replace(found, sober=min(found.sober, significance), dispersion=wide)


def _most_clusters(joint: Joint, target: int, low, high) -> float:
    return clusters_expected(
        int(joint.clusters[target]), joint.spacings(target), low, high, joint.total
    )


def _mean_lengths(active: list[Activity]) -> np.ndarray:
    """Give each channel's mean length of activity, nanoseconds.

    Half-windows at least as long hold the same around the activity and around its
    peaks, and only the former is tried.
    """
    lengths = [int((a.end - a.start).mean()) if len(a.start) else 0 for a in active]
    return np.array(lengths, dtype=np.int64)


def _counted(active: list[Activity], joint: Joint, ladder, halves_s, below):
    """Count the windows of some channels: dead time, hits, clusters met."""
    halves = np.array([round(h * NS) for h in halves_s], dtype=np.int64)
    shape = (*ladder.shape, len(halves))
    counted = (*shape, len(joint.slid[0]), len(joint.counts))
    dead = np.full(shape, -1, dtype=np.int64)
    found = np.zeros(counted, dtype=np.int32)
    met = np.zeros(counted, dtype=np.int32)
    count_windows(
        (
            np.concatenate([a.start for a in active]),
            np.concatenate([a.end for a in active]),
            np.concatenate([a.snr for a in active]),
        ),
        np.append(0, np.cumsum([len(a.start) for a in active])),
        ladder,
        halves,
        below,
        joint.segments,
        joint.slid,
        int(MOST_DEAD * joint.total),
        (dead, found, met),
    )
    return dead, found, met


def _scores(joint, active, ladder, kinds, dead, found, met) -> np.ndarray:
    """Give the score of every combination and shift, shape as ``found``."""
    share = np.where(dead >= 0, dead, 0) / joint.total
    expected = share[..., None, None] * joint.counts
    sober = np.zeros(found.shape, dtype=np.float32)
    # at fewer Poisson's significance is about 1 or less
    worth = found > expected + 1.5 * np.sqrt(expected)
    worth &= dead[..., None, None] >= 0
    index = np.nonzero(worth)
    plain = poisson_significance(
        found[index], np.broadcast_to(expected, found.shape)[index]
    )
    sober[index] = plain
    high = plain >= PLAIN
    if not high.any():
        return sober
    rows = [i[high] for i in index]
    combination = np.stack([rows[0], rows[1], rows[2], rows[4]])
    which, place = np.unique(combination, axis=1, return_inverse=True)
    most = np.empty(which.shape[1])
    for k, (c, t, w, m) in enumerate(which.T):
        what, half = kinds[w]
        low, high_ = joint.windows(active[c].around(what), float(ladder[c, t]), half)
        most[k] = _most_clusters(joint, int(m), low, high_)
    grouped = poisson_significance(met[tuple(rows)], most[place.ravel()])
    sober[tuple(rows)] = np.minimum(plain[high], grouped)
    return sober
