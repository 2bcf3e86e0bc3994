"""One channel against the strain: every threshold with every half-window."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from dq.counting import poisson_significance
from dq.segments import NS, Segments, to_ns_array
from dq.witnesses.chance import (
    calibrated_significance,
    cluster_starts,
    clusters_expected,
    inner_spacings,
    shifted_counts,
)
from dq.witnesses.windows import FusedTime, hits, union_of_windows


class JointStrain:
    """The strain's transients in the time that it shares with some channel.

    Parameters
    ----------
    times : ndarray of int64, sorted
        Nanoseconds.
    joint : Segments
        Time in which both were analysed; at least one segment.

    Attributes
    ----------
    line : FusedTime
    positions : ndarray of int64
        Transients on the line.
    first : ndarray of int
        Number of the first transient of each cluster.
    spacings : ndarray of int64
        Spacings inside clusters.
    """

    def __init__(self, times: np.ndarray, joint: Segments):
        self.line = FusedTime(joint)
        self.positions = self.line.position(times[joint.contains(times)])
        self.first = cluster_starts(self.positions, self.line.total)
        self.spacings = inner_spacings(self.positions, self.first)

    def windows(self, loud: np.ndarray, half_window_s: float):
        """Give the union of windows around sorted times, on the line."""
        starts, ends = union_of_windows(loud, round(half_window_s * NS))
        low, high = self.line.position(starts), self.line.position(ends)
        kept = high > low
        return low[kept], high[kept]


@dataclass(frozen=True)
class Combination:
    """A channel at one threshold and half-window.

    Attributes
    ----------
    threshold, half_window_s : float
    coincidences : int
        Strain transients in the windows.
    expected : float
        By chance: strain transients times the fraction of dead time.
    clusters, clusters_expected : int, float
        The same for clusters of transients.
    total : int
        Strain transients in jointly analysed time.
    dead_s : float
    significance : float
        Of the coincidences, by Poisson's law.
    sober : float
        The smallest of the significances measured so far.
    dispersion : float
        Of the shifted counts; not a number until measured.
    windows, windows_hit : int
    """

    threshold: float
    half_window_s: float
    coincidences: int
    expected: float
    clusters: int
    clusters_expected: float
    total: int
    dead_s: float
    significance: float = 0.0
    sober: float = 0.0
    dispersion: float = float("nan")
    windows: int = 0
    windows_hit: int = 0

    @property
    def separate(self) -> int:
        """Coincidences that share neither a window nor a cluster."""
        return min(self.clusters, self.windows_hit)


def sorted_transients(transients) -> tuple[np.ndarray, np.ndarray]:
    """Give times (nanoseconds) and SNR of a table, in order of time."""
    when = to_ns_array(transients["gps_time"].to_numpy(float))
    order = np.argsort(when, kind="stable")
    return when[order], transients["snr"].to_numpy(float)[order]


def climb(
    strain: JointStrain,
    when: np.ndarray,
    snr: np.ndarray,
    settings,
    *,
    ladder: list[float] | None = None,
) -> tuple[Combination | None, int]:
    """Go through both ladders.

    Parameters
    ----------
    strain : JointStrain
    when, snr : ndarray
        The channel's transients, sorted by time.
    settings : dq.config.Witnesses
    ladder : list of float, optional
        Thresholds of the channel; the settings' on the SNR by default.

    Returns
    -------
    best : Combination or None
        The most significant; at equal significance the one with less dead time.
    tested : int
        Combinations tested. A threshold that leaves the same transients as the one
        below it is no test of its own, nor are windows that cover nothing or all.
    """
    found, before = [], -1
    ladder = settings.snr_thresholds if ladder is None else ladder
    for threshold in ladder if len(strain.positions) else ():
        loud = when[snr >= threshold]
        if len(loud) in (0, before):
            continue
        before = len(loud)
        for half_window_s in settings.half_windows_s:
            low, high = strain.windows(loud, half_window_s)
            if 0 < np.sum(high - low) < strain.line.total:
                found.append(_count(strain, threshold, half_window_s, low, high))
    if not found:
        return None, 0
    plain = poisson_significance(
        [c.coincidences for c in found], [c.expected for c in found]
    )
    grouped = poisson_significance(
        [c.clusters for c in found], [c.clusters_expected for c in found]
    )
    sober = np.minimum(plain, grouped)
    k = max(range(len(found)), key=lambda i: (sober[i], -found[i].dead_s))
    best = replace(found[k], significance=float(plain[k]), sober=float(sober[k]))
    return _with_windows(best, strain, when[snr >= best.threshold]), len(found)


def _count(strain: JointStrain, threshold, half_window_s, low, high) -> Combination:
    dead, total = int(np.sum(high - low)), strain.line.total
    inside = hits(strain.positions, low, high) >= 0
    met = np.logical_or.reduceat(inside, strain.first)
    return Combination(
        threshold=threshold,
        half_window_s=half_window_s,
        coincidences=int(np.count_nonzero(inside)),
        expected=len(inside) * dead / total,
        clusters=int(np.count_nonzero(met)),
        clusters_expected=clusters_expected(
            len(met), strain.spacings, low, high, total
        ),
        total=len(inside),
        dead_s=dead / NS,
    )


def _with_windows(best: Combination, strain: JointStrain, loud) -> Combination:
    low, high = strain.windows(loud, best.half_window_s)
    index = hits(strain.positions, low, high)
    hit = len(np.unique(index[index >= 0]))
    return replace(best, windows=len(low), windows_hit=hit)


def calibrate(
    best: Combination, strain: JointStrain, when: np.ndarray, snr: np.ndarray
) -> Combination:
    """Hold the best combination against circular shifts; never raises significance."""
    low, high = strain.windows(when[snr >= best.threshold], best.half_window_s)
    shifted = shifted_counts(
        strain.positions, strain.first, low, high, strain.line.total
    )
    significance, wide = calibrated_significance(
        best.clusters, best.clusters_expected, shifted
    )
    return replace(best, sober=min(best.sober, significance), dispersion=wide)
