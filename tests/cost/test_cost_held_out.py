"""Held-out efficiency: blocks, and whether its interval holds the truth."""

import importlib.util
from pathlib import Path

import numpy as np
import pytest

from dq.cost import Selection, alternate_blocks, held_out
from dq.cost.held_out import clustered_interval
from dq.counting import clopper_pearson
from dq.segments import NS, Segments, to_ns_array

GPS = 1_420_000_000

_PATH = Path(__file__).parents[1] / "benchmarks" / "held_out.py"
_SPEC = importlib.util.spec_from_file_location("held_out_benchmark", _PATH)
bench = importlib.util.module_from_spec(_SPEC)
_SPEC.loader.exec_module(bench)


@pytest.mark.parametrize("block_s", [1.0, 64.0, 128.0, 1000.0])
def test_blocks_alternate_on_the_gps_grid_and_part_the_time(block_s, rng):
    starts = np.sort(rng.uniform(0, 3000, 12)).reshape(6, 2)
    analysed = Segments(*to_ns_array(GPS + starts).T)
    even, odd = alternate_blocks(analysed, block_s)
    assert even | odd == analysed
    assert not even & odd
    for half, parity in ((even, 0), (odd, 1)):
        for low, high in half:
            for moment in (low, (low + high) // 2, high - 1):
                assert moment // round(block_s * NS) % 2 == parity


def test_a_block_does_not_depend_on_where_the_night_begins():
    night = Segments.from_seconds([GPS], [GPS + 1000])
    later = Segments.from_seconds([GPS + 300], [GPS + 1300])
    for one, other in zip(
        alternate_blocks(night, 64), alternate_blocks(later, 64), strict=True
    ):
        assert one & later == other & night


def test_each_transient_is_measured_once_by_a_choice_that_did_not_see_it(rng):
    """A choice that memorises its own transients removes none of the others."""
    analysed = Segments.from_seconds([GPS], [GPS + 2000])
    times = np.sort(to_ns_array(GPS + rng.uniform(0, 2000, 150)))
    seen = []

    def select(part):
        mine = times[part.contains(times)]
        seen.append(len(mine))
        return Selection({"memory": Segments(mine, mine + 1)}, ["memory"])

    table = held_out(select, times, analysed=analysed, block_s=64.0)
    assert sum(seen) == len(times)
    assert table.loc["all"].tolist() == [0.0, *clopper_pearson(0, 150)]


def test_a_veto_of_one_half_is_measured_on_the_other_alone():
    """By hand: blocks of 100 s from GPS 1420000000, which is an even multiple."""
    analysed = Segments.from_seconds([GPS], [GPS + 400])
    times = to_ns_array(GPS + np.array([10.0, 20.0, 110.0, 120.0, 130.0, 210.0]))
    fixed = Segments.from_seconds([GPS], [GPS + 115])

    def select(part):
        even = part.contains([GPS * NS])[0]
        return Selection({"a": fixed} if even else {}, ["a"] if even else [])

    table = held_out(select, times, analysed=analysed, block_s=100.0)
    assert table.loc["a"].tolist() == [1 / 3, *clopper_pearson(1, 3)]
    assert table.loc["all"].tolist() == [1 / 6, *clopper_pearson(1, 6)]


def test_nothing_to_hold_out_gives_no_row():
    short = Segments.from_seconds([GPS], [GPS + 50])
    for analysed in (short, Segments.none()):
        table = held_out(
            lambda part: Selection({}, []),
            np.zeros(0, dtype=np.int64),
            analysed=analysed,
            block_s=128.0,
        )
        assert len(table) == 0


def test_interval_holds_the_true_efficiency_of_planted_couplings():
    """60 nights: 95 % within the exact interval of so many; misses would show."""
    for name, held in bench.coverage_of_couplings(60, seed=7).items():
        low, high = clopper_pearson(int(held.sum()), len(held), 0.99)
        assert low <= 0.95 <= high, name


def test_bursts_that_go_together_count_less():
    """Ten bursts of five, half of them removed: five of ten, in effect."""
    cluster = np.repeat(np.arange(10), 5)
    low, high = clustered_interval(cluster % 2 == 0, cluster)
    # 10 / 9 of 10 * 2.5^2 / 50^2, over 1 / 4 / 49
    effect = 10 / 9 * 62.5 / 2500 * 4 * 49
    expected = clopper_pearson(25 / effect, 50 / effect)
    assert (low, high) == pytest.approx(expected)
    alone = clustered_interval(cluster % 2 == 0, np.arange(50))
    assert alone[0] > low
    assert alone[1] < high
    assert clustered_interval(np.zeros(50, bool), cluster) == clopper_pearson(0, 50)


def test_interval_holds_the_truth_of_bursts():
    held = bench.coverage_of_couplings(60, 7, bench.bursty_night)["a"]
    low, high = clopper_pearson(int(held.sum()), len(held), 0.99)
    assert low <= 0.95 <= high


def test_chance_vetoes_look_good_where_chosen_and_not_held_out():
    honest, flattered = bench.coverage_of_chance(15, seed=8)
    assert honest.mean() >= 0.8
    assert flattered.mean() <= 0.3
