"""Strain targets on the time that they share with a channel, shifted and not."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from dq.segments import NS, Segments, to_ns_array
from dq.witnesses.chance import LEAST_SHIFT_S, cluster_starts, inner_spacings
from dq.witnesses.kernel import fill_windows
from dq.witnesses.windows import FusedTime

#: The golden ratio's fraction spreads shifts evenly and matches no period.
_GOLDEN = 0.6180339887498949


#: What a window lies around. A long earthquake would take half a night with it if
#: only its whole activity counted; a swing is as long as it lasts.
ACTIVITY, PEAK = "activity", "peak"


@dataclass(frozen=True)
class Targets:
    """Strain transients that witnesses are sought for.

    Attributes
    ----------
    times : ndarray of int64, sorted
        Nanoseconds.
    group : ndarray of int64, shape (n,)
        Number of each transient's family among ``names[1:]``; -1: of none.
    clusters : ndarray of int64, shape (n, 2)
        Number of the cluster that each belongs to, among all and within its family.
        They are found once, on all of the time: a witness that is taken out must not
        change what counts as one burst.
    names : tuple of str
        ``all``, then the families that are targets of their own.
    """

    times: np.ndarray
    group: np.ndarray
    clusters: np.ndarray
    names: tuple[str, ...]

    @classmethod
    def of(cls, times, group, names: tuple[str, ...], analysed: Segments) -> Targets:
        """Sort transients of the analysed time and find their clusters.

        Parameters
        ----------
        times : ndarray of int64
            Nanoseconds.
        group : ndarray of int64
        names : tuple of str
        analysed : Segments
        """
        order = np.argsort(times, kind="stable")
        order = order[analysed.contains(times[order])]
        times, group = times[order], group[order]
        clusters = np.zeros((len(times), 2), dtype=np.int64)
        if analysed:
            line = FusedTime(analysed)
            for number in range(len(names)):
                mine = np.ones(len(times), bool) if number == 0 else group == number - 1
                ids = np.zeros(mine.sum(), dtype=np.int64)
                ids[cluster_starts(line.position(times[mine]), line.total)] = 1
                clusters[mine, min(number, 1)] = np.cumsum(ids)
        return cls(times, group, clusters, names)

    def within(self, time: Segments) -> Targets:
        """Give the targets that lie in some time."""
        inside = time.contains(self.times)
        return self._take(inside, self.names)

    def only(self, name: str) -> Targets:
        """Give one target as all there is."""
        if name == "all":
            one = self._take(np.ones(len(self.times), bool), ("all",))
        else:
            mine = self.group == self.names.index(name) - 1
            one = self._take(mine, (name,))
            one = replace(one, clusters=one.clusters[:, ::-1])
        return replace(one, group=np.full(len(one.times), -1))

    def _take(self, kept: np.ndarray, names: tuple[str, ...]) -> Targets:
        return Targets(self.times[kept], self.group[kept], self.clusters[kept], names)


@dataclass(frozen=True)
class Activity:
    """A channel's transients or its slow activity.

    Attributes
    ----------
    start, end, peak : ndarray of int64, sorted by start
        Nanoseconds.
    snr : ndarray of float64
    """

    start: np.ndarray
    end: np.ndarray
    peak: np.ndarray
    snr: np.ndarray

    @classmethod
    def of(cls, table) -> Activity:
        """Take the columns of a table of ``dq.tables.TRANSIENTS``."""
        start, end, peak = (
            to_ns_array(table[c].to_numpy(float))
            for c in ("gps_start", "gps_end", "gps_time")
        )
        order = np.argsort(start, kind="stable")
        snr = table["snr"].to_numpy(float)
        end = np.maximum(end, start)
        return cls(start[order], end[order], peak[order], snr[order])

    def around(self, what: str) -> Activity:
        """Give the activity that windows lie around: all of it, or its peaks alone."""
        if what == ACTIVITY:
            return self
        order = np.argsort(self.peak, kind="stable")
        peak = self.peak[order]
        return Activity(peak, peak, peak, self.snr[order])


class Joint:
    """Targets on the joint time, laid end to end.

    Parameters
    ----------
    targets : Targets
    time : Segments
        Time in which strain and channel were both analysed; not empty.
    slides : int
        Circular shifts besides the unshifted one.

    Attributes
    ----------
    total : int
        Length of the line, nanoseconds.
    counts : ndarray of int64, shape (n_targets,)
        Transients of each target; ``clusters`` likewise counts clusters.
    """

    def __init__(self, targets: Targets, time: Segments, slides: int = 0):
        self.targets = targets.within(time)
        line = FusedTime(time)
        self.total = line.total
        lengths = time.ends - time.starts
        self.segments = (time.starts, time.ends, np.cumsum(lengths) - lengths)
        position = line.position(self.targets.times)
        group, labels = self.targets.group, self.targets.clusters
        self.first: list[np.ndarray] = []
        self.positions: list[np.ndarray] = []
        for number in range(len(targets.names)):
            mine = np.ones(len(group), bool) if number == 0 else group == number - 1
            own = labels[mine, min(number, 1)]
            self.positions.append(position[mine])
            self.first.append(np.flatnonzero(np.diff(own, prepend=-1)))
        self.counts = np.array([len(p) for p in self.positions])
        self.clusters = np.array([len(f) for f in self.first])
        self.slid = self._slides(position, group, labels, slides)

    def _slides(self, position, group, labels, slides: int):
        """Give positions, groups and cluster labels of every slide, sorted."""
        n = len(position)
        shifts = np.append(0, _shifts(slides, self.total))
        out = (
            np.empty((len(shifts), n), dtype=np.int64),
            np.empty((len(shifts), n), dtype=np.int64),
            np.empty((len(shifts), n, 2), dtype=np.int64),
        )
        for k, shift in enumerate(shifts):
            moved = (position + shift) % self.total
            # a circular shift of sorted positions is a rotation
            turn = int(np.count_nonzero(position + shift < self.total))
            for values, whole in zip((moved, group, labels), out, strict=True):
                whole[k] = np.concatenate([values[turn:], values[:turn]])
        return out

    def windows(self, activity: Activity, threshold: float, half_window_s: float):
        """Give the union of windows around activity (or peaks), on the line."""
        low = np.empty(len(activity.start), dtype=np.int64)
        high = np.empty(len(activity.start), dtype=np.int64)
        found = fill_windows(
            activity.start,
            activity.end,
            activity.snr,
            threshold,
            round(half_window_s * NS),
            *self.segments,
            low,
            high,
        )
        return low[:found], high[:found]

    def spacings(self, target: int) -> np.ndarray:
        """Give the spacings inside a target's clusters, nanoseconds."""
        return inner_spacings(self.positions[target], self.first[target])


def _shifts(count: int, total: int) -> np.ndarray:
    """Give shifts that lie evenly, none of them near no shift at all."""
    least = min(round(LEAST_SHIFT_S * NS), total // 4)
    share = np.arange(1, count + 1) * _GOLDEN % 1.0
    return least + (share * (total - 2 * least)).astype(np.int64)
