"""Data faults of one channel: saturation, flat line and dropout, with exact times.

A fault shows as a run of identical consecutive samples. Coarsely digitised channels
repeat values by chance, so a run counts as flat only when it is longer than the
channel's own repetitions explain; the law of these is measured on the spot. A plateau
at the channel's extreme value that the signal enters and leaves with a jump is
saturation even when short, since a clipped wave is cut anew at every crest.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

#: Shortest run that can be a flat line or a plateau: three equal samples of a
#: continuous quantity do not happen, four leave room for rounding (own choice).
MIN_RUN = 4
MIN_PLATEAU = 3

#: Expected number of chance runs per examined stretch that is still called a fault.
CHANCE = 1e-3

#: A plateau's entry and exit must jump by this many steps of the digitiser.
JUMP_STEPS = 3.0


@dataclass(frozen=True)
class EqualRuns:
    """Runs of identical samples: first index, length, value, and kind of evidence.

    ``flat`` runs are too long for chance; ``plateau`` runs are entered and left with a
    jump, and count as saturation when their value is the channel's extreme.
    """

    first: np.ndarray
    length: np.ndarray
    value: np.ndarray
    flat: np.ndarray
    plateau: np.ndarray


def equal_runs(values: np.ndarray) -> EqualRuns:
    """Find the suspicious runs of identical samples in contiguous data.

    Parameters
    ----------
    values : ndarray, shape (n_samples,)
        Finite samples.

    Returns
    -------
    EqualRuns
        Sorted by time; may be empty.
    """
    same = values[1:] == values[:-1]
    if not same.any():
        none = np.zeros(0, dtype=np.int64)
        return EqualRuns(none, none, values[:0], none.astype(bool), none.astype(bool))
    edges = np.flatnonzero(np.diff(same, prepend=False, append=False))
    first, last = edges[::2], edges[1::2]
    length = last - first + 1
    shortest = _chance_length(length)
    long_enough = length >= MIN_PLATEAU
    first, length = first[long_enough], length[long_enough]
    plateau = _jumps(values, first, first + length - 1)
    keep = plateau | (length >= shortest)
    first, length, plateau = first[keep], length[keep], plateau[keep]
    return EqualRuns(first, length, values[first], length >= shortest, plateau)


def _chance_length(length: np.ndarray) -> int:
    """Give the run length that chance repetition does not explain.

    The number of runs of at least L samples falls by a constant factor per sample.
    Counting runs, not samples, keeps a long fault from speaking for itself; the 8 says
    that few runs are no evidence of repetition. Where values differ in how often they
    repeat, the longest tenth of the runs gives the factor that matters.
    """
    pairs = len(length)
    factor = np.count_nonzero(length >= 3) / (pairs + 8.0)
    if pairs >= 50:
        factor = max(factor, 0.1 ** (1.0 / (np.quantile(length, 0.9) - 1.0)))
    factor = min(factor, 0.9999)
    if factor <= 0.0:
        return MIN_RUN
    extra = np.log(CHANCE / max(pairs, 1)) / np.log(factor)
    return max(MIN_RUN, 2 + int(np.ceil(extra)))


def _jumps(values: np.ndarray, first: np.ndarray, last: np.ndarray) -> np.ndarray:
    inside = (first > 0) & (last < len(values) - 1)
    into = np.abs(values[first] - values[np.maximum(first - 1, 0)])
    out = np.abs(values[np.minimum(last + 1, len(values) - 1)] - values[last])
    steps = np.abs(np.diff(values[: 2**16]))
    steps = steps[steps > 0]
    quantum = steps.min() if len(steps) else 0.0
    return inside & (np.minimum(into, out) > JUMP_STEPS * quantum)


def classify(
    value: np.ndarray,
    flat: np.ndarray,
    plateau: np.ndarray,
    *,
    lowest: float,
    highest: float,
) -> np.ndarray:
    """Name each run: ``saturation``, ``dropout``, ``flat_line`` or empty (no fault).

    Parameters
    ----------
    value, flat, plateau : ndarray, shape (n_runs,)
        As in :class:`EqualRuns`.
    lowest, highest : float
        Extreme samples of the channel over the whole range.
    """
    extreme = (value == lowest) | (value == highest)
    names = np.where(flat, np.where(value == 0, "dropout", "flat_line"), "")
    return np.where(extreme & (flat | plateau) & (value != 0), "saturation", names)
