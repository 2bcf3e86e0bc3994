"""What vetoes bring and take, in words that leave no doubt whether they pay."""

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

#: Sources of vetoes that were chosen; faults are no choice.
_CHOSEN = ("witness", "family")


def losing_vetoes(cost: pd.DataFrame) -> list[str]:
    """Say which vetoes the search is better off without, worst first.

    Faults are no choice and are not named.
    """
    rows = cost[cost["source"].fillna("").isin(_CHOSEN)]
    worse = rows[rows["volume_time_unique"] < 1.0 - SMALLEST_LOSS]
    worse = worse.sort_values("volume_time_unique", kind="stable")
    return [
        f"{row.veto} loses more than it gains: without it, and with all others, volume "
        f"x time would be {1.0 / row.volume_time_unique:.3f} times as large."
        for row in worse.itertuples()
    ]


#: A chance of the test signals that a veto takes, number of vetoes counted, below which
#: it is called too many (own choice: the same as for a witness).
TOO_MANY = 0.01


def actuated_words(cost: pd.DataFrame) -> list[str]:
    """Say how many test signals the vetoes take, and which veto takes too many.

    Parameters
    ----------
    cost : pandas.DataFrame
        ``dq.tables.VETO_COST``, the row ``all`` last.

    Returns
    -------
    list of str
        One sentence on all vetoes, then one for each veto to beware of; none where no
        test signals are listed.
    """
    import pandas as pd

    total, each = cost.iloc[-1], cost[cost["source"].fillna("").isin(_CHOSEN)]
    if pd.isna(total.test_signals) or len(cost) < 2:
        return []
    if total.test_signals == 0:
        return ["No test signal fell into analysed time."]
    count, taken = int(total.test_signals), int(total.test_signals_vetoed)
    out = [
        f"Of {count} test signals in analysed time the vetoes take {taken} "
        f"({100 * taken / count:.1f} %; 95 % interval "
        f"{100 * total.test_signals_low:.1f} to {100 * total.test_signals_high:.1f} "
        f"%); their dead time predicts {count * total.dead_time_fraction:.1f}, and as "
        f"many or more by chance with p = {total.test_signals_p_value:.2g}."
    ]
    for row in each.itertuples():
        if row.test_signals_p_value * len(each) <= TOO_MANY:
            predicted = count * row.dead_time_fraction
            out.append(
                f"Beware: {row.veto} takes {int(row.test_signals_vetoed)} of {count} "
                f"test signals where its dead time predicts {predicted:.2g}: it may "
                "answer signals, and would then take real ones."
            )
    return out
