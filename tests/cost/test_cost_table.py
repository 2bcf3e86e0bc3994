"""The cost table against a slow recount with ``portion``."""

import numpy as np
import pandas as pd
import portion
import pytest
import scipy.stats

from dq.cost import cost_of
from dq.counting import clopper_pearson
from dq.segments import NS, Segments
from dq.tables import VETO_COST, VETOES, conform

GPS = 1_420_000_000
ANALYSED = Segments.from_seconds([GPS, GPS + 600], [GPS + 500, GPS + 1000])


def random_night(rng, vetoes=4):
    rows = []
    for k in range(vetoes):
        for start in rng.uniform(-20, 1000, 15):
            a = GPS * NS + round(start * NS)
            b = a + round(rng.exponential(4) * NS) + 1
            rows.append((a, b, f"v{k}", 3, "witness", f"OV-{k}", ""))
    table = conform(pd.DataFrame(rows, columns=[c.name for c in VETOES]), VETOES)
    times = GPS + np.sort(rng.uniform(0, 1000, 200))
    strain = pd.DataFrame({"gps_time": times, "snr": 5 + rng.exponential(8, 200)})
    return table, strain


def outside(pairs):
    out = portion.empty()
    for a, b in pairs:
        out |= portion.closedopen(a, b)
    return out


def length(interval):
    return sum(i.upper - i.lower for i in interval if not i.empty) / NS


@pytest.mark.reference
def test_every_number_equals_the_slow_recount(rng):
    for _ in range(5):
        table, strain = random_night(rng)
        cost = cost_of(table, strain, analysed=ANALYSED)
        assert list(cost.columns) == [c.name for c in VETO_COST]
        judged = outside(ANALYSED)
        times = np.round(strain.gps_time * 1e9).astype(int)
        kept = [(t, s) for t, s in zip(times, strain.snr, strict=True) if t in judged]
        union, gone = portion.empty(), set()
        for row in cost.itertuples():
            rows = table if row.veto == "all" else table[table.veto == row.veto]
            mine = outside(zip(rows.gps_start, rows.gps_end, strict=True)) & judged
            removed = {t for t, _ in kept if t in mine}
            assert row.dead_time_s == pytest.approx(length(mine), abs=1e-9)
            assert row.dead_time_fraction == pytest.approx(length(mine) / 900)
            assert row.removed == len(removed)
            assert row.efficiency == pytest.approx(len(removed) / len(kept))
            for bound, got in ((8, row.efficiency_snr8), (20, row.efficiency_snr20)):
                loud = [t for t, s in kept if s >= bound]
                want = sum(t in mine for t in loud) / len(loud)
                assert got == pytest.approx(want)
            pieces = [i for i in mine if not i.empty]
            used = sum(any(t in i for t in removed) for i in pieces)
            assert row.segments == len(pieces)
            assert row.use_fraction == pytest.approx(used / len(pieces))
            chance = length(mine) / 900
            assert row.expected_by_chance == pytest.approx(len(kept) * chance)
            tail = scipy.stats.binom.sf(len(removed) - 1, len(kept), chance)
            assert row.p_value == pytest.approx(tail, rel=1e-6)
            low, high = clopper_pearson(len(removed), len(kept))
            ratio = row.efficiency / chance
            assert row.efficiency_over_dead_time == pytest.approx(ratio)
            assert row.efficiency_over_dead_time_low == pytest.approx(low / chance)
            assert row.efficiency_over_dead_time_high == pytest.approx(high / chance)
            others = table[table.veto != row.veto] if row.veto != "all" else table[:0]
            beside = outside(zip(others.gps_start, others.gps_end, strict=True))
            only = length(mine - beside)
            assert row.unique_dead_time_s == pytest.approx(only, abs=1e-9)
            assert row.unique_removed == len({t for t in removed if t not in beside})
            if row.veto != "all":
                assert row.added_dead_time_s == pytest.approx(length(mine - union))
                assert row.added_removed == len(removed - gone)
                union, gone = union | mine, gone | removed


def test_added_columns_add_up_to_all(rng):
    table, strain = random_night(rng)
    cost = cost_of(table, strain, analysed=ANALYSED)
    parts, total = cost.iloc[:-1], cost.iloc[-1]
    assert total.veto == "all"
    assert parts.added_dead_time_s.sum() == pytest.approx(total.dead_time_s)
    assert parts.added_removed.sum() == total.removed


def test_what_was_not_measured_stays_empty(rng):
    table, strain = random_night(rng)
    cost = cost_of(table, strain, analysed=ANALYSED)
    columns = ["held_out_efficiency", "held_out_low", "held_out_high", "signal_loss"]
    columns += ["volume_time_ratio", "volume_time_unique"]
    assert cost[columns].isna().all().all()


def test_fractions_of_nothing_are_missing_not_zero():
    empty = conform(pd.DataFrame(columns=[c.name for c in VETOES]), VETOES)
    strain = pd.DataFrame({"gps_time": [], "snr": []})
    cost = cost_of(empty, strain, analysed=Segments.none())
    assert len(cost) == 1
    row = cost.iloc[0]
    assert row.removed == 0
    assert np.isnan(row.efficiency)
    assert np.isnan(row.dead_time_fraction)
