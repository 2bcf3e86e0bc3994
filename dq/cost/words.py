"""The volume-time ratio in words that leave no doubt whether the vetoes pay."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    import pandas as pd


def volume_sentence(volume: dict) -> str:
    """Say what the vetoes do to the search.

    Parameters
    ----------
    volume : dict
        ``volume_time_ratio`` of the summary.

    Returns
    -------
    str
        One or two sentences.
    """
    value, low, high = (volume.get(k) for k in ("value", "low", "high"))
    if value is None or np.isnan(value):
        return (
            "What the vetoes do to the search's volume cannot be told: too few "
            "transients for a background at a fixed false alarm rate."
        )
    if volume.get("dead_time_fraction") == 0.0:
        return "No time is vetoed, so the search neither gains nor loses."
    source = volume.get("background", "strain transients")
    rate = volume.get("rate_hz")
    at = "" if rate is None else f" at one false alarm in {1 / rate:.0f} s"
    text = f"Against the {source}{at}, the search's volume x time is multiplied by "
    text += f"{value:.3f}"
    sure = low is not None and not np.isnan(low)
    if sure:
        text += f" (95 % interval {low:.3f} to {high:.3f})"
    if (sure and high < 1.0) or (not sure and value < 1.0):
        text += ": the vetoes lose more than they gain."
    elif sure and low > 1.0:
        text += ": the vetoes gain more than they lose."
    else:
        text += ": whether the vetoes gain or lose cannot be told from this night."
    even, dead = volume.get("break_even"), volume.get("dead_time_fraction")
    if even is not None and dead is not None:
        text += (
            f" They take {100 * dead:.2f} % of the time; with this fall of loudness "
            f"they would break even at {100 * even:.2f} %."
        )
    return text


#: A loss smaller than this share of volume x time is not worth a word: the loudness
#: that it rests on is read off ten transients or so (own choice).
SMALLEST_LOSS = 0.01


def losing_vetoes(cost: pd.DataFrame) -> list[str]:
    """Say which vetoes the search is better off without, worst first.

    Faults are no choice and are not named.
    """
    rows = cost[cost["source"].fillna("").isin(["witness", "family"])]
    worse = rows[rows["volume_time_unique"] < 1.0 - SMALLEST_LOSS]
    worse = worse.sort_values("volume_time_unique", kind="stable")
    return [
        f"{row.veto} loses more than it gains: without it, and with all others, volume "
        f"x time would be {1.0 / row.volume_time_unique:.3f} times as large."
        for row in worse.itertuples()
    ]
