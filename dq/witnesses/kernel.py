"""Compiled counting: windows of one channel against targets, shifted and not.

The slow twin is in ``tests/witnesses``.
"""

from __future__ import annotations

import numpy as np
from numba import njit


@njit(cache=True, nogil=True)
def _position(time, segment, seg_start, seg_end, seg_before):
    """Covered time before a moment; ``segment`` is where the search goes on."""
    last = seg_start.shape[0] - 1
    while segment < last and seg_start[segment + 1] <= time:
        segment += 1
    if time <= seg_start[segment]:
        return seg_before[segment], segment
    inside = min(time, seg_end[segment]) - seg_start[segment]
    return seg_before[segment] + inside, segment


@njit(cache=True, nogil=True)
def fill_windows(
    start, end, snr, threshold, half, seg_start, seg_end, seg_before, low, high
):
    """Lay a channel's windows end to end on the joint time.

    Parameters
    ----------
    start, end : ndarray of int64, sorted by start
        Activity, nanoseconds.
    snr : ndarray of float64
    threshold : float
    half : int
        Added on both sides, nanoseconds.
    seg_start, seg_end, seg_before : ndarray of int64
        Joint time, and the time covered before each segment.
    low, high : ndarray of int64
        Out: disjoint windows on the line.

    Returns
    -------
    int
        Number of windows.
    """
    found, at_low, at_high = 0, 0, 0
    open_low, open_high, is_open = 0, 0, False
    for i in range(start.shape[0] + 1):
        last = i == start.shape[0]
        if not last and snr[i] < threshold:
            continue
        if is_open and (last or start[i] - half > open_high):
            a, at_low = _position(open_low, at_low, seg_start, seg_end, seg_before)
            b, at_high = _position(open_high, at_high, seg_start, seg_end, seg_before)
            if b > a:
                low[found], high[found] = a, b
                found += 1
            is_open = False
        if last:
            break
        if is_open:
            open_high = max(open_high, end[i] + half)
        else:
            open_low, open_high, is_open = start[i] - half, end[i] + half, True
    return found


@njit(cache=True, nogil=True)
def _first_from(position, at, time):
    """Give the first position at or after a time, searching on from ``at``."""
    size = position.shape[0]
    step, low = 1, at
    while low + step < size and position[low + step] < time:
        low += step
        step *= 2
    high = min(low + step, size)
    while low < high:
        middle = (low + high) // 2
        if position[middle] < time:
            low = middle + 1
        else:
            high = middle
    return low


@njit(cache=True, nogil=True)
def _count_slide(low, high, windows, position, group, clusters, hits, met, seen):
    """Count targets and clusters inside windows, for all targets and each group.

    ``hits``, ``met`` have one entry for all and one per group; ``clusters`` holds a
    target's cluster among all and within its group. Few windows leap from one to the
    next, many walk along the targets: both visit the same ones in the same order.
    """
    seen[:] = -1
    size = position.shape[0]
    leaps = 4 * windows < size
    j = 0
    for k in range(windows):
        if leaps:
            j = _first_from(position, j, low[k])
        else:
            while j < size and position[j] < low[k]:
                j += 1
        while j < size and position[j] < high[k]:
            hits[0] += 1
            if clusters[j, 0] != seen[0]:
                seen[0] = clusters[j, 0]
                met[0] += 1
            own = group[j] + 1
            if own > 0:
                hits[own] += 1
                if clusters[j, 1] != seen[own]:
                    seen[own] = clusters[j, 1]
                    met[own] += 1
            j += 1
        if j == size:
            break


@njit(cache=True, nogil=True)
def count_windows(rows, offsets, ladders, halves, below, segments, targets, most, out):
    """Count coincidences of many channels that share their joint time.

    Parameters
    ----------
    rows : tuple of ndarray
        Start and end (int64, nanoseconds) and SNR of all channels' activity, one
        channel after the other, sorted by start.
    offsets : ndarray of int64, shape (n_channels + 1,)
    ladders : ndarray, shape (n_channels, n_thresholds)
        Not a number where a channel's ladder is shorter.
    halves : ndarray of int64, shape (n_windows,)
        Nanoseconds.
    below : ndarray of int64, shape (n_channels,)
        Only half-windows shorter than this are tried for a channel, nanoseconds.
    segments : tuple of ndarray of int64
        Start, end and time before of the joint segments.
    targets : tuple of ndarray
        For each slide (axis 0; the first is no slide): sorted positions on the line,
        group (-1: none), and clusters (last axis: among all, within the group).
    most : int
        Windows that cover more than this are not counted, nanoseconds.
    out : tuple of ndarray
        Dead time (n_channels, n_thresholds, n_windows; -1: not tested); hits and
        clusters met (n_channels, n_thresholds, n_windows, n_slides, 1 + n_groups).
    """
    start, end, snr = rows
    seg_start, seg_end, seg_before = segments
    position, group, clusters = targets
    dead, hits, met = out
    for channel in range(offsets.shape[0] - 1):
        a, b = offsets[channel], offsets[channel + 1]
        low = np.empty(b - a, dtype=np.int64)
        high = np.empty(b - a, dtype=np.int64)
        seen = np.empty(hits.shape[4], dtype=np.int64)
        before = -1
        for t in range(ladders.shape[1]):
            threshold = ladders[channel, t]
            loud = np.sum(snr[a:b] >= threshold)
            # a threshold that leaves the same rows is no test of its own
            if loud == 0 or loud == before:
                continue
            before = loud
            for w in range(halves.shape[0]):
                if halves[w] >= below[channel]:
                    continue
                windows = fill_windows(
                    start[a:b],
                    end[a:b],
                    snr[a:b],
                    threshold,
                    halves[w],
                    seg_start,
                    seg_end,
                    seg_before,
                    low,
                    high,
                )
                total = np.sum(high[:windows] - low[:windows])
                if total == 0 or total > most:
                    continue
                dead[channel, t, w] = total
                for slide in range(position.shape[0]):
                    _count_slide(
                        low,
                        high,
                        windows,
                        position[slide],
                        group[slide],
                        clusters[slide],
                        hits[channel, t, w, slide],
                        met[channel, t, w, slide],
                        seen,
                    )
