"""Veto segments and their choice under a dead-time budget."""

import itertools

import numpy as np
import pandas as pd
import pytest

from dq.config import Vetoes, parse_config
from dq.errors import ConfigError, InputError
from dq.segments import NS, Segments
from dq.tables import VETOES, WITNESSES, conform
from dq.vetoes import build_vetoes, choose_vetoes, file_safe
from dq.vetoes.build import family_segments

GPS = 1_420_000_000
WHOLE = Segments.from_seconds([GPS], [GPS + 1000])


def times_table(seconds, snr=9.0, reach=0.0):
    seconds = np.asarray(seconds, float)
    return pd.DataFrame(
        {
            "gps_time": GPS + seconds,
            "gps_start": GPS + seconds - reach,
            "gps_end": GPS + seconds + reach,
            "snr": np.broadcast_to(snr, seconds.shape),
        }
    )


def witness_rows(*rows):
    """Make accepted witnesses from (channel, threshold, half window, safety)."""
    names = ("channel", "snr_threshold", "half_window_s", "safety")
    frame = pd.DataFrame([dict(zip(names, r, strict=True)) for r in rows])
    return conform(frame.assign(accepted=True, target="all"), WITNESSES)


def veto_rows(**vetoes):
    """Make a veto table from name=[(start, end), ...] in seconds after GPS."""
    rows = []
    for name, pairs in vetoes.items():
        source = "fault" if name.startswith("fault") else "witness"
        for a, b in pairs:
            start, end = (GPS * NS + round(x * NS) for x in (a, b))
            rows.append(
                (start, end, name, 1 if source == "fault" else 3, source, "", "")
            )
    names = [c.name for c in VETOES]
    return conform(pd.DataFrame(rows, columns=names), VETOES)


def segments(frame, name):
    rows = frame[frame.veto == name]
    return Segments.from_arrays(
        rows.gps_start.to_numpy(int), rows.gps_end.to_numpy(int)
    )


def choose(vetoes, seconds, budget):
    choice = choose_vetoes(
        vetoes, times_table(seconds), analysed=WHOLE, max_dead_time=budget
    )
    return choice.chosen, choice.refused


def test_faults_are_padded_clipped_and_category_one():
    faults = {
        "saturation": Segments.from_seconds([GPS + 5], [GPS + 6]),
        "flat_line": Segments.from_seconds([GPS + 999], [GPS + 1000]),
        "not_finite": Segments.from_seconds([GPS + 50], [GPS + 60]),
    }
    out = build_vetoes(
        witness_rows(), {}, faults, analysed=WHOLE, settings=Vetoes(fault_padding_s=0.5)
    )
    assert segments(out, "fault-saturation") == Segments.from_seconds(
        [GPS + 4.5], [GPS + 6.5]
    )
    assert segments(out, "fault-flat-line").ends[0] == (GPS + 1000) * NS
    assert out.veto.unique().tolist() == [
        "fault-saturation", "fault-flat-line", "fault-not-finite",
    ]  # fmt: skip
    assert (out.category == 1).all()


def test_faults_outside_analysed_time_make_no_veto():
    faults = {"not_finite": Segments.from_seconds([GPS + 2000], [GPS + 2001])}
    out = build_vetoes(
        witness_rows(), {}, faults, analysed=WHOLE, settings=Vetoes(fault_padding_s=0.5)
    )
    assert len(out) == 0


def test_witness_windows_follow_threshold_half_window_and_safety():
    auxiliary = {"OV-A": times_table([10, 10.3, 50], [6, 20, 30])}
    rows = witness_rows(("OV-A", 15.0, 0.25, "safe"))
    out = build_vetoes(rows, auxiliary, {}, analysed=WHOLE, settings=Vetoes())
    assert segments(out, "witness-ov-a") == Segments.from_seconds(
        [GPS + 10.05, GPS + 49.75], [GPS + 10.55, GPS + 50.25]
    )
    assert (out.category == 2).all()
    rows = witness_rows(("OV-A", 15.0, 0.25, "cannot tell"))
    out = build_vetoes(rows, auxiliary, {}, analysed=WHOLE, settings=Vetoes())
    assert (out.category == 3).all()


def test_windows_are_those_of_the_activity_moved_by_the_delay():
    """[start - before, end + after) plus strain minus witness, by hand."""
    rows = witness_rows(("OV-A", 5.5, 0.25, "safe"))
    rows = rows.assign(before_s=0.1, after_s=0.4, delay_s=0.02)
    out = build_vetoes(
        rows,
        {"OV-A": times_table([10.0], reach=2.0)},
        {},
        analysed=WHOLE,
        settings=Vetoes(),
    )
    assert segments(out, "witness-ov-a") == Segments.from_seconds(
        [f"{GPS + 7}.92"], [f"{GPS + 12}.42"]
    )


def test_one_channel_may_witness_two_families():
    rows = witness_rows(("OV-A", 5.5, 0.1, "safe"), ("OV-A", 15.0, 0.2, "safe"))
    rows["target"] = pd.array(["all", "thunder"], dtype="string")
    auxiliary = {"OV-A": times_table([10, 50], [6, 30])}
    out = build_vetoes(rows, auxiliary, {}, analysed=WHOLE, settings=Vetoes())
    assert out.veto.unique().tolist() == ["witness-ov-a", "witness-ov-a-thunder"]
    assert set(out.family) == {"", "thunder"}


def test_whole_seconds_round_outward_within_analysed_time():
    faults = {"dropout": Segments.from_seconds([GPS + 999.2], [GPS + 999.3])}
    analysed = Segments.from_seconds([GPS], [GPS + 999.5])
    settings = Vetoes(whole_seconds=True, fault_padding_s=0.0)
    out = build_vetoes(
        witness_rows(("OV-A", 5.5, 0.25, "safe")),
        {"OV-A": times_table([10.0, 20.9])},
        faults,
        analysed=analysed,
        settings=settings,
    )
    assert segments(out, "witness-ov-a") == Segments.from_seconds(
        [GPS + 9, GPS + 20], [GPS + 11, GPS + 22]
    )
    assert segments(out, "fault-dropout") == Segments.from_seconds(
        [GPS + 999], [GPS + 999.5]
    )


def test_families_are_vetoed_by_name_alone_and_in_category_three():
    strain = times_table([10, 20, 30], reach=0.5).assign(
        family=["thunder", "chirp_like", "thunder"]
    )
    for names, count in (([], 0), (["thunder"], 2)):
        settings = Vetoes(strain_families=names, family_padding_s=0.25)
        out = build_vetoes(
            witness_rows(), {}, {}, analysed=WHOLE, settings=settings, strain=strain
        )
        assert len(out) == count
    assert segments(out, "family-thunder") == Segments.from_seconds(
        [GPS + 9.25, GPS + 29.25], [GPS + 10.75, GPS + 30.75]
    )
    assert (out.category == 3).all()
    assert (out.source == "family").all()


@pytest.mark.parametrize("name", ["chirp_like", "unknown", "unsorted"])
def test_a_family_that_may_hold_signals_is_refused_in_one_line(name):
    raw = {
        "site": {"name": "x", "strain": "OV-STRAIN"},
        "data": {"files": ["a.h5"], "channels": "c.csv"},
        "vetoes": {"strain_families": ["thunder", name]},
    }
    with pytest.raises(ConfigError, match=f"family '{name}' is never vetoed") as told:
        parse_config(raw)
    assert "\n" not in str(told.value)
    with pytest.raises(InputError, match="never vetoed"):
        family_segments(None, name, padding_s=0.1)


def test_names_are_safe_for_files_and_unique():
    names = ["OV:A", "OV_A", "ov-a"]
    auxiliary = {n: times_table([10]) for n in names}
    rows = witness_rows(*((n, 5.5, 0.1, "safe") for n in names))
    out = build_vetoes(rows, auxiliary, {}, analysed=WHOLE, settings=Vetoes())
    assert out.veto.nunique() == 3
    assert file_safe("A/../b c") == "a_.._b_c"


def test_budget_is_never_exceeded_and_ties_are_stable(rng):
    for _ in range(60):
        vetoes = {
            f"w{k}": [(a, a + rng.uniform(1, 30)) for a in rng.uniform(0, 960, 3)]
            for k in range(6)
        }
        seconds = np.sort(rng.uniform(0, 1000, 80))
        table = veto_rows(**vetoes)
        chosen, refused = choose(table, seconds, 0.1)
        union = Segments.none()
        for name in chosen:
            union = union | (segments(table, name) & WHOLE)
        assert union.total_s <= 100
        assert set(chosen) | set(refused) == set(vetoes)
        assert choose(table, seconds, 0.1)[0] == chosen


def test_trap_of_the_cheap_small_gain():
    """Budget 10: a gains 2 for 1, b gains 10 for 10; greed by ratio alone takes a."""
    table = veto_rows(a=[(0, 1)], b=[(100, 110)])
    seconds = [0.2, 0.4, *(100.5 + np.arange(10) * 0.9)]
    chosen, refused = choose(table, seconds, 0.010)
    assert chosen == ["b"]
    assert "does not fit" in refused["a"]


def test_choice_is_near_the_best_of_all_subsets(rng):
    ratios = []
    for _ in range(40):
        vetoes = {
            f"w{k}": [(a, a + rng.uniform(1, 40)) for a in rng.uniform(0, 950, 2)]
            for k in range(7)
        }
        table = veto_rows(**vetoes)
        seconds = np.sort(rng.uniform(0, 1000, 120))
        times = np.round((GPS + seconds) * 1e9).astype(np.int64)
        parts = {n: segments(table, n) & WHOLE for n in vetoes}
        best = 0
        for size in range(8):
            for names in itertools.combinations(parts, size):
                union = Segments.none()
                for n in names:
                    union = union | parts[n]
                if union.total_s <= 120:
                    best = max(best, union.contains(times).sum())
        union = Segments.none()
        for n in choose(table, seconds, 0.12)[0]:
            union = union | parts[n]
        ratios.append(union.contains(times).sum() / max(best, 1))
    assert np.mean(ratios) > 0.95
    assert min(ratios) > 0.405  # Tang et al. 2021, for the better of the two rules


def test_faults_come_first_even_beyond_the_budget():
    table = veto_rows(w=[(0, 1)], **{"fault-dropout": [(10, 90)]})
    chosen, refused = choose(table, [0.5], 0.05)
    assert chosen == ["fault-dropout"]
    assert "faults alone exceed the budget by 30.000 s" in refused["w"]


def test_equal_vetoes_are_taken_in_the_order_of_the_table():
    """Two of four that tie in gain and cost fit; a budget is used to its last ns."""
    pairs = {"d": [(0, 50)], "a": [(100, 150)], "c": [(200, 250)], "b": [(300, 350)]}
    seconds = [10, 110, 210, 310]
    chosen, refused = choose(veto_rows(**pairs), seconds, 0.1)
    assert chosen == ["d", "a"]
    assert set(refused) == {"c", "b"}


def test_time_shared_with_a_chosen_veto_costs_nothing_again():
    """After a, b costs only what a does not cover and fits; c does not."""
    table = veto_rows(a=[(0, 60)], b=[(10, 80)], c=[(500, 570)])
    chosen, refused = choose(table, [5, 15, 30, 55, 70, 520, 530], 0.1)
    assert chosen == ["a", "b"]
    assert "20.000 s of the budget are left" in refused["c"]


def test_what_adds_nothing_is_refused_with_its_reason():
    table = veto_rows(a=[(0, 1)], b=[(0, 2)])
    chosen, refused = choose(table, [0.5], 0.05)
    assert chosen == ["a"]
    assert "adds nothing" in refused["b"]


def test_no_vetoes_and_no_transients():
    assert choose(veto_rows(), [1.0], 0.05) == ([], {})
    chosen, refused = choose(veto_rows(a=[(0, 1)]), [], 0.05)
    assert chosen == []
    assert "holds no strain transient" in refused["a"]


@pytest.mark.parametrize("budget", [0.0, 1.0])
def test_extreme_budgets(budget):
    table = veto_rows(a=[(0, 1)], b=[(5, 6)])
    chosen, _ = choose(table, [0.5, 5.5], budget)
    assert chosen == (["a", "b"] if budget else [])
