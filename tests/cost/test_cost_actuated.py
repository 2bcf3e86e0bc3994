"""Test signals inside vetoes, against the dead time that predicts them."""

import numpy as np
import pandas as pd
import pytest
from scipy.stats import binom, binomtest

from dq.cost import actuated_losses, actuated_words, cost_of
from dq.segments import NS, Segments
from dq.tables import VETOES, conform, empty

GPS, HOUR = 1_420_000_000, 3600
WHOLE = Segments.from_seconds([GPS], [GPS + HOUR])


def at(seconds):
    return np.sort(((GPS + np.asarray(seconds, float)) * NS).astype(np.int64))


def vetoes(**segments):
    rows = [
        (low, high, name, 3, name.partition("_")[0], "OV-A", "")
        for name, part in segments.items()
        for low, high in part
    ]
    columns = [c.name for c in VETOES]
    return conform(pd.DataFrame(rows, columns=columns), VETOES)


def cost(signals, **segments):
    strain = pd.DataFrame({"gps_time": [GPS + 5.0], "snr": [9.0]})
    parts = []
    if signals is not None:
        parts.append(actuated_losses(segments, at(signals), analysed=WHOLE))
    return cost_of(vetoes(**segments), strain, analysed=WHOLE, parts=parts)


A = Segments.from_seconds([GPS, GPS + 100], [GPS + 20, GPS + 120])
B = Segments.from_seconds([GPS + 110], [GPS + 150])


def test_counts_interval_and_chance_equal_their_definitions():
    signals = [-5, 3, 19.99, 20, 112, 149, 2000, 3000, 3700]
    out = actuated_losses({"a": A, "b": B}, at(signals), analysed=WHOLE)
    # two lie outside analysed time; a segment's end does not belong to it
    assert out["test_signals"].tolist() == [7, 7, 7]
    assert out["test_signals_vetoed"].tolist() == [3, 2, 4]
    for name, taken, dead in (("a", 3, 40), ("b", 2, 40), ("all", 4, 70)):
        row = out.loc[name]
        exact = binomtest(taken, 7).proportion_ci(0.95, "exact")
        assert row["test_signals_low"] == pytest.approx(exact.low)
        assert row["test_signals_high"] == pytest.approx(exact.high)
        chance = binom.sf(taken - 1, 7, dead / HOUR)
        assert row["test_signals_p_value"] == pytest.approx(chance)


def test_vetoes_that_know_nothing_are_called_too_many_as_often_as_stated(rng):
    small = 0
    for _ in range(400):
        signals = rng.uniform(0, HOUR, 40)
        out = actuated_losses({"a": A}, at(signals), analysed=WHOLE)
        small += out.loc["a", "test_signals_p_value"] <= 0.05
    # the chance of a count is at most what is stated, since counts are whole
    assert small <= binom.ppf(0.9999, 400, 0.05)


def test_words_name_the_veto_that_answers_signals():
    told = actuated_words(cost([1, 2, 3, 4, 2000, 3000], witness_a=A, witness_b=B))
    assert len(told) == 2
    assert told[0].startswith("Of 6 test signals in analysed time the vetoes take 4 ")
    assert "predicts 0.1" in told[0]
    assert told[1].startswith("Beware: witness_a takes 4 of 6")


def test_words_are_calm_where_dead_time_explains_the_count():
    told = actuated_words(cost(np.linspace(10, 3590, 20), witness_a=A, witness_b=B))
    assert len(told) == 1
    # a fault is no choice and hears nothing
    assert len(actuated_words(cost([1, 2, 3, 4, 2000], fault_a=A))) == 1


def test_without_signals_there_are_no_words_and_no_numbers():
    table = cost(None, witness_a=A)
    assert table["test_signals"].isna().all()
    assert actuated_words(table) == []
    table = cost([-10, 4000], witness_a=A)
    assert actuated_words(table) == ["No test signal fell into analysed time."]
    assert table["test_signals_p_value"].isna().all()
    nothing = actuated_losses({}, at([5]), analysed=WHOLE)
    table = cost_of(
        empty(VETOES),
        pd.DataFrame({"gps_time": [], "snr": []}),
        analysed=WHOLE,
        parts=[nothing],
    )
    assert actuated_words(table) == []
