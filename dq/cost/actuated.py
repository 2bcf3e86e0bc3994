"""Test signals that the vetoes would take away, against what their dead time predicts.

The observatory's own test signals pass through the detector, so a veto of a channel
that hears the strain takes them as it would take a real signal. A veto that knows
nothing of signals takes the share of them that it takes of time: the count is binomial
with the dead-time fraction, and a small chance of as many or more is a warning that the
veto is not safe. A signal counts as taken where its listed time lies in the veto.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING

import numpy as np

from dq.cost.cost import ALL, union_of
from dq.counting import binomial_chance, clopper_pearson
from dq.segments import Segments

if TYPE_CHECKING:
    import pandas as pd

#: Columns of ``dq.tables.VETO_COST`` that are filled here.
_COLUMNS = (
    "test_signals",
    "test_signals_vetoed",
    "test_signals_low",
    "test_signals_high",
    "test_signals_p_value",
)


def actuated_losses(
    segments: Mapping[str, Segments], signals: np.ndarray, *, analysed: Segments
) -> pd.DataFrame:
    """Count the test signals that each veto takes away.

    Parameters
    ----------
    segments : mapping of str to Segments
        The vetoes in force, within analysed time.
    signals : ndarray of int64
        Times of the test signals, nanoseconds; those outside analysed time are left
        out.
    analysed : Segments

    Returns
    -------
    pandas.DataFrame
        ``test_signals`` in analysed time; of these ``test_signals_vetoed``; the share's
        exact 95 % interval (Clopper & Pearson 1934, Biometrika 26 404); and the
        binomial chance of at least as many for a veto of the same dead time that knows
        nothing. Indexed by veto, with the row ``all``.

    Examples
    --------
    >>> hour = Segments.from_seconds([0], [3600])
    >>> veto = {"v": Segments.from_seconds([0], [36])}
    >>> signals = np.array([5, 1000, 2000, 3000]) * 1_000_000_000
    >>> row = actuated_losses(veto, signals, analysed=hour).loc["all"]
    >>> int(row.test_signals), int(row.test_signals_vetoed)
    (4, 1)
    >>> bool(abs(row.test_signals_p_value - (1 - 0.99**4)) < 1e-12)
    True
    """
    import pandas as pd

    signals = signals[analysed.contains(signals)]
    count = len(signals)
    rows = {}
    for name, mine in {**segments, ALL: union_of(segments.values())}.items():
        taken = int(np.count_nonzero(mine.contains(signals)))
        low, high, chance = float("nan"), float("nan"), float("nan")
        if count:
            low, high = clopper_pearson(taken, count)
            share = mine.total_ns / analysed.total_ns
            chance = binomial_chance(taken, count, share)
        rows[name] = (count, taken, low, high, chance)
    return pd.DataFrame.from_dict(rows, orient="index", columns=_COLUMNS)
