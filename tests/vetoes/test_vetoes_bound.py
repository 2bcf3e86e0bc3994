"""The choice against slow twins, the exact optimum and its own bound."""

import importlib.util
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from dq.segments import NS, Segments, to_ns_array
from dq.vetoes.choose import choose_vetoes, greedy
from dq.vetoes.cover import Cover

GPS = 1_420_000_000

_PATH = Path(__file__).parents[1] / "benchmarks" / "veto_choice.py"
_SPEC = importlib.util.spec_from_file_location("veto_choice_benchmark", _PATH)
bench = importlib.util.module_from_spec(_SPEC)
_SPEC.loader.exec_module(bench)


def plain_greedy(vetoes, base, times, weights, room):
    """Take the best rate, everything worked out anew with unions of segments."""
    taken, left, chosen = base, np.where(base.contains(times), 0, weights), []
    while True:
        best, best_rate = None, 0.0
        for i, veto in enumerate(vetoes):
            gain = int(left[veto.contains(times)].sum())
            cost = (taken | veto).total_ns - taken.total_ns
            if i in chosen or gain == 0 or (room is not None and cost > room):
                continue
            if gain / max(cost, 1) > best_rate:
                best, best_rate = (i, cost), gain / max(cost, 1)
        if best is None:
            return chosen
        chosen.append(best[0])
        room = None if room is None else room - best[1]
        taken = taken | vetoes[best[0]]
        left = np.where(vetoes[best[0]].contains(times), 0, left)


def coarse_case(rng):
    """Make vetoes on whole seconds, so that ties of rates are frequent."""
    vetoes = []
    for _ in range(rng.integers(1, 9)):
        starts = rng.integers(0, 60, rng.integers(1, 5))
        lengths = rng.integers(1, 6, len(starts))
        vetoes.append(Segments(starts * NS, (starts + lengths) * NS))
    times = np.sort(rng.integers(0, 65, 25)) * NS
    base = Segments([int(rng.integers(0, 60)) * NS], [64 * NS])
    return vetoes, base if rng.uniform() < 0.5 else Segments.none(), times


def test_lazy_greedy_equals_plain_greedy_ties_included(rng):
    ties = 0
    for _ in range(500):
        vetoes, base, times = coarse_case(rng)
        weights = rng.integers(1, 4, len(times)) * 1000
        room = None if rng.uniform() < 0.3 else int(rng.integers(0, 20)) * NS
        cover = Cover(vetoes, base, times, weights)
        rates = cover.gains() / np.maximum(cover.costs(), 1)
        ties += len(np.unique(rates[rates > 0])) < np.count_nonzero(rates > 0)
        assert greedy(cover, room) == plain_greedy(vetoes, base, times, weights, room)
    assert ties > 50


def test_costs_and_gains_equal_those_of_unions(rng):
    for _ in range(100):
        vetoes, base, times = coarse_case(rng)
        cover = Cover(vetoes, base, times, np.ones(len(times), dtype=np.int64))
        taken = base
        for i in rng.permutation(len(vetoes)):
            for k, veto in enumerate(vetoes):
                cost = (taken | veto).total_ns - taken.total_ns
                gain = np.count_nonzero(veto.contains(times) & ~taken.contains(times))
                assert cover.costs()[k] == cost
                assert cover.gains()[k] == cover.gain(k) == gain
            cover.take(i)
            taken = taken | vetoes[i]


def test_split_costs_never_exceed_the_union(rng):
    for _ in range(100):
        vetoes, base, times = coarse_case(rng)
        cover = Cover(vetoes, base, times, np.ones(len(times), dtype=np.int64))
        costs = cover.shared_costs(np.ones(cover.count, dtype=bool), cover.start_open)
        some = rng.uniform(size=len(vetoes)) < 0.5
        union = Segments.none()
        for veto in np.array(vetoes, dtype=object)[some]:
            union = union | veto
        assert costs[some].sum() <= (union - base).total_ns + 1.0


@pytest.mark.reference
def test_choice_against_the_exact_optimum():
    """scipy.optimize.milp; 0.405 is the proven constant (Tang et al. 2021)."""
    chosen, tight = bench.ratios(40, seed=5)
    assert chosen.mean() >= 0.98
    assert chosen.min() >= 0.405
    assert chosen.max() <= 1.0 + 1e-9
    assert tight.max() <= 1.0 + 1e-9
    assert tight.mean() > 0.8


def test_worth_by_snr_and_family_turns_the_choice():
    """One second buys three quiet ones (a) or one loud (b); the budget holds one."""
    vetoes = bench.veto_table(
        {
            "a": Segments.from_seconds([GPS], [GPS + 1]),
            "b": Segments.from_seconds([GPS + 10], [GPS + 11]),
            "c": Segments.from_seconds([GPS + 20], [GPS + 21]),
        }
    )
    strain = pd.DataFrame(
        {
            "gps_time": GPS
            + np.array([0.2, 0.4, 0.6, 10.5, *np.arange(20.1, 21, 0.2)]),
            "snr": [6.0, 6.0, 6.0, 50.0, *[40.0] * 5],
            "family": ["thunder"] * 3 + ["whistle"] + ["chirp_like"] * 5,
        }
    )
    whole = Segments.from_seconds([GPS], [GPS + 100])

    def first(**options):
        return choose_vetoes(
            vetoes, strain, analysed=whole, max_dead_time=0.01, **options
        ).chosen

    # five signals in c count nothing, whatever they weigh
    assert first() == ["a"]
    assert first(weights="snr") == ["b"]
    assert first(family_weights={"whistle": 4.0, "chirp_like": 9.0}) == ["b"]


def test_curve_holds_every_budget(rng):
    vetoes, strain, whole, _ = bench.random_case(rng)
    table = bench.veto_table(vetoes)
    choice = choose_vetoes(table, strain, analysed=whole, max_dead_time=0.1)
    curve = choice.curve
    times = to_ns_array(strain.gps_time.to_numpy())
    union = Segments.none()
    for row in curve.itertuples():
        if row.step:
            union = union | (vetoes[row.veto] & whole)
        assert row.dead_time_s == pytest.approx(union.total_s)
        assert row.removed == np.count_nonzero(union.contains(times))
        assert row.gain <= row.bound <= 1.0
        budget = row.dead_time_s / whole.total_s
        best = bench.optimum(vetoes, strain, whole, budget * (1 + 1e-12))
        assert best <= row.bound * len(times) + 1e-6
    assert (np.diff(curve.dead_time_s) >= 0).all()
    assert set(curve.veto[curve.chosen.astype(bool)]) - {""} <= set(choice.chosen)


def test_choice_of_nothing_and_without_transients():
    empty = bench.veto_table({"a": Segments.from_seconds([GPS], [GPS + 1])}).iloc[:0]
    whole = Segments.from_seconds([GPS], [GPS + 100])
    none = pd.DataFrame({"gps_time": [], "snr": []}, dtype=float)
    for strain in (none, pd.DataFrame({"gps_time": [GPS + 1.0], "snr": [8.0]})):
        choice = choose_vetoes(empty, strain, analysed=whole, max_dead_time=0.1)
        assert choice.chosen == []
        assert len(choice.curve) == 1
    assert np.isnan(choose_vetoes(empty, none, analysed=whole, max_dead_time=0.1).bound)
