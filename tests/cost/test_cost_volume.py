"""The volume-time ratio against closed forms and in words."""

import importlib.util
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from dq.cost import (
    Background,
    losing_vetoes,
    union_of,
    volume_sentence,
    volume_time,
    volume_time_columns,
)
from dq.segments import NS, Segments

GPS = 1_420_000_000
WHOLE = Segments.from_seconds([GPS], [GPS + 1000])

_PATH = Path(__file__).parents[1] / "benchmarks" / "held_out.py"
_SPEC = importlib.util.spec_from_file_location("held_out_for_volume", _PATH)
bench = importlib.util.module_from_spec(_SPEC)
_SPEC.loader.exec_module(bench)


def pareto(alpha, count=2000, lowest=5.0):
    """Give the quantiles of N(> rho) = count (rho / lowest)^-alpha, no chance in it."""
    return lowest * (np.arange(1, count + 1) / count) ** (-1 / alpha)


def background(snr, at, rate_hz=0.05):
    table = pd.DataFrame({"gps_time": GPS + np.asarray(at), "snr": snr})
    return Background(table, analysed=WHOLE, rate_hz=rate_hz)


@pytest.mark.parametrize("alpha", [2.0, 3.0, 5.0])
@pytest.mark.parametrize("dead", [0.01, 0.2])
@pytest.mark.parametrize("removed", [0.0, 0.5, 0.75])
def test_pareto_law_gives_the_closed_form(alpha, dead, removed):
    """(1 - d) ((1 - d) / (1 - e))^(3 / a): every fourth quarter of the ranks goes."""
    snr = pareto(alpha)
    gone = (np.arange(len(snr)) % 4) >= 4 - round(4 * removed)
    at = np.where(gone, 0.5 * 1000 * dead, 0.5 * (1000 + 1000 * dead))
    veto = Segments.from_seconds([GPS], [GPS + 1000 * dead])
    found = background(snr, at).ratio(veto)
    true = (1 - dead) * ((1 - dead) / (1 - removed)) ** (3 / alpha)
    assert found == pytest.approx(true, rel=0.05 if removed else 1e-6)


def test_loudness_is_the_snr_of_the_wanted_rank():
    """50 of the rate 0.05 Hz in 1000 s: the 50th loudest, before any veto."""
    snr = pareto(3.0)
    found = background(snr, np.linspace(0, 999, len(snr)))
    assert found.loudness(np.ones(len(snr), dtype=bool), 1000.0) == pytest.approx(
        snr[49]
    )


def test_a_random_veto_loses_and_break_even_says_when(rng):
    snr = pareto(3.0)
    # every tenth of the ranks lies in the veto, which takes a tenth of the time
    second = np.where(np.arange(len(snr)) % 10 == 4, 0.5, 5.5)
    at = rng.permutation(100).repeat(20) * 10 + second
    starts = GPS + np.arange(0, 1000, 10)
    veto = Segments.from_seconds(starts, starts + 1)
    found = volume_time(background(snr, at), veto, rng)
    assert found.value == pytest.approx(0.9, abs=0.03)
    assert found.low <= found.value <= found.high
    assert found.break_even == pytest.approx(0.0, abs=0.05)
    after, before = found.snr_after, found.snr_before
    assert (1 - found.break_even) * (before / after) ** 3 == pytest.approx(1, abs=0.06)


def test_too_few_transients_tell_nothing(rng):
    few = background([8.0] * 4, [1, 2, 3, 4])
    found = volume_time(few, Segments.from_seconds([GPS], [GPS + 2]), rng)
    assert np.isnan([found.value, found.low, found.high]).all()
    none = Background(
        pd.DataFrame({"gps_time": [], "snr": []}, dtype=float),
        analysed=Segments.none(),
        rate_hz=0.1,
    )
    assert np.isnan(volume_time(none, Segments.none(), rng).value)


def test_columns_alone_and_beside_the_others_equal_their_definition(rng):
    table = background(5 + rng.exponential(5, 300), rng.uniform(0, 1000, 300))
    vetoes = {}
    for name in "abc":
        starts = rng.uniform(0, 990, 15)
        vetoes[name] = Segments.from_seconds(GPS + starts, GPS + starts + 4) & WHOLE
    out = volume_time_columns(vetoes, table)
    whole = table.ratio(union_of(vetoes.values()))
    for name, veto in vetoes.items():
        others = union_of(v for n, v in vetoes.items() if n != name)
        assert out.loc[name].volume_time_ratio == pytest.approx(table.ratio(veto))
        unique = whole / table.ratio(others)
        assert out.loc[name].volume_time_unique == pytest.approx(unique)
    assert out.loc["all"].volume_time_ratio == whole


def test_the_same_seed_gives_the_same_interval():
    rng = np.random.default_rng(4)
    table = background(5 + rng.exponential(5, 200), rng.uniform(0, 1000, 200))
    veto = Segments([GPS * NS], [(GPS + 50) * NS])
    one, two = (
        volume_time(table, veto, np.random.default_rng([1, 2])) for _ in range(2)
    )
    assert one == two


def test_interval_holds_the_closed_form():
    inside, values = bench.coverage_of_volume(40, seed=9)
    assert inside.mean() >= 0.85
    assert np.median(values) == pytest.approx(1.0, abs=0.1)


def test_words_leave_no_doubt():
    def said(value, low, high):
        return volume_sentence({"value": value, "low": low, "high": high})

    assert "the vetoes lose more than they gain" in said(0.8, 0.7, 0.9)
    assert "the vetoes gain more than they lose" in said(1.4, 1.1, 1.9)
    assert "cannot be told" in said(1.1, 0.8, 1.3)
    assert "cannot be told" in said(None, None, None)
    idle = {"value": 1.0, "low": 1.0, "high": 1.0, "dead_time_fraction": 0.0}
    assert "neither gains nor loses" in volume_sentence(idle)
    cost = pd.DataFrame(
        {
            "veto": ["fault-x", "witness-a", "witness-b", "all"],
            "source": ["fault", "witness", "witness", None],
            "volume_time_unique": [0.5, 1.2, 0.8, 0.9],
        }
    )
    (line,) = losing_vetoes(cost)
    assert line.startswith("witness-b loses more than it gains")
    assert "1.250 times" in line
