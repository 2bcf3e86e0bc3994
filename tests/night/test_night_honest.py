"""From tables to verdict: families, held-out halves, signals, and the same again."""

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from dq.config import parse_config
from dq.cost import alternate_blocks
from dq.night.judge import judge
from dq.night.ledger import PLANTED_FILE, Ledger, read_planted, write_optional
from dq.night.summary import _test_signals
from dq.segments import NS, Segments
from dq.tables import (
    COVERAGE,
    INJECTIONS,
    NIGHT_CHANNELS,
    PLANTED,
    TRANSIENTS,
    VETO_COST,
    conform,
    csv_text,
)

GPS, HOUR = 1_420_000_000, 3600


def transients(seconds, snr):
    seconds = np.round(np.asarray(seconds, float), 6)
    order = np.argsort(seconds)
    at, snr = GPS + seconds[order], np.broadcast_to(snr, seconds.shape)[order]
    table = pd.DataFrame(
        {
            "gps_time": at,
            "gps_start": at - 0.05,
            "gps_end": at + 0.05,
            "frequency_hz": 100.0,
            "f_low_hz": 90.0,
            "f_high_hz": 110.0,
            "q": 8.0,
            "snr": snr,
            "amplitude": 1e-22,
            "tile_count": 9,
        }
    )
    return conform(table, TRANSIENTS)


def invented(rng, *, families=True) -> Ledger:
    """Make a night: OV-A hears 60 loud ones, OV-B and OV-C nothing of the strain."""
    coupled = rng.uniform(5, HOUR - 5, 60)
    alone = rng.uniform(5, HOUR - 5, 140)
    strain = transients(
        np.concatenate([coupled, alone]),
        np.concatenate([rng.uniform(30, 90, 60), 5.5 + rng.exponential(2, 140)]),
    )
    if families:
        loud = (strain["snr"] > 25) | (strain["snr"] < 6)
        strain = strain.assign(family=np.where(loud, "thunder", "whistle"))
    tables = {
        "OV-STRAIN": strain,
        "OV-A": transients(np.append(coupled, rng.uniform(0, HOUR, 20)), 12.0),
        "OV-B": transients(rng.uniform(0, HOUR, 100), 12.0),
        "OV-C": transients(rng.uniform(0, HOUR, 100), 12.0),
    }
    coverage = [(n, "analysed", GPS * NS, (GPS + HOUR) * NS) for n in tables]
    coverage.append(("OV-STRAIN", "dropout", (GPS + 9) * NS, (GPS + 10) * NS))
    channels = pd.DataFrame({"channel": list(tables), "status": "ok", "safe": ""})
    columns = [c.name for c in COVERAGE]
    return Ledger(
        strain="OV-STRAIN",
        transients=tables,
        channels=conform(channels, NIGHT_CHANNELS),
        coverage=conform(pd.DataFrame(coverage, columns=columns), COVERAGE),
    )


def settings(**vetoes):
    return parse_config(
        {
            "site": {"name": "Orrin Vale", "strain": "OV-STRAIN"},
            "data": {"files": ["a.h5"], "channels": "c.csv"},
            "vetoes": vetoes,
        }
    )


def row(verdict, name):
    return verdict.cost[verdict.cost.veto == name].iloc[0]


def test_a_planted_witness_holds_out_and_pays(rng):
    verdict = judge(invented(rng), settings())
    a = row(verdict, "witness-ov-a")
    assert a.held_out_low <= 0.3 <= a.held_out_high
    assert a.efficiency == pytest.approx(0.3, abs=0.02)
    assert a.signal_loss_low <= a.dead_time_fraction <= a.signal_loss_high
    assert a.volume_time_ratio > 1
    assert verdict.volume["low"] > 1
    assert row(verdict, "all").held_out_efficiency > 0.2
    assert verdict.choice.gain <= verdict.choice.bound
    # a fault's veto is the same in both halves
    fault = row(verdict, "fault-dropout")
    assert fault.held_out_efficiency == fault.efficiency


def test_test_signals_in_the_vetoes_are_counted_over_all_of_the_night(rng):
    ledger = invented(rng)
    # two signals lie where OV-A is active, so its veto takes them; one was not analysed
    active = ledger.transients["OV-A"]["gps_time"].to_numpy()[[3, 30]]
    quiet = GPS + np.linspace(5.5, HOUR - 5.5, 30)
    at = np.sort([*active, *quiet, GPS - 100])
    signals = conform(pd.DataFrame({"gps_time": at}), INJECTIONS)
    verdict = judge(replace(ledger, injections=signals), settings())
    a = row(verdict, "witness-ov-a")
    assert a.test_signals == 32
    held = [
        any(low <= t < high for low, high in a_segments(verdict, "witness-ov-a"))
        for t in np.rint(at * NS)
    ]
    assert a.test_signals_vetoed == sum(held) >= 2
    told = _test_signals(verdict.cost)
    assert told["analysed"] == 32
    assert told["vetoed"] >= a.test_signals_vetoed
    assert told["expected_by_dead_time"] == pytest.approx(
        32 * row(verdict, "all").dead_time_fraction
    )
    assert told["words"][0].startswith("Of 32 test signals")
    assert _test_signals(judge(ledger, settings()).cost) is None


def a_segments(verdict, name):
    rows = verdict.vetoes[verdict.vetoes.veto == name]
    return list(zip(rows.gps_start, rows.gps_end, strict=True))


def test_a_choice_on_one_half_does_not_look_at_the_other(rng, monkeypatch):
    """Move the other half's transients: what is selected on this one stays."""
    from dq.night import judge as module

    ledger = invented(rng)
    whole = Segments.from_seconds([GPS], [GPS + HOUR])
    config = settings()
    even, odd = alternate_blocks(whole, config.vetoes.held_out_block_s)
    one = module._decide(ledger, config, even, whole=whole)
    strain = ledger.transients["OV-STRAIN"]
    times = np.rint(strain["gps_time"].to_numpy() * NS).astype(np.int64)
    kept = strain[even.contains(times) | (rng.uniform(size=len(times)) < 0.3)]
    tables = {**ledger.transients, "OV-STRAIN": kept.reset_index(drop=True)}
    other = Ledger("OV-STRAIN", tables, ledger.channels, ledger.coverage)
    two = module._decide(other, config, even, whole=whole)
    pd.testing.assert_frame_equal(one[0], two[0])
    assert one[2].chosen == two[2].chosen
    assert odd


def test_the_same_tables_give_the_same_bytes(rng):
    ledger = invented(rng)
    first, again = (judge(ledger, settings()) for _ in range(2))
    assert csv_text(first.cost, VETO_COST) == csv_text(again.cost, VETO_COST)
    assert first.volume == again.volume


def planted(count, family):
    at = GPS + np.linspace(10, HOUR - 10, count)
    table = pd.DataFrame(
        {
            "gps_time": at,
            "kind": "chirp",
            "snr": 12.0,
            "found": True,
            "gps_start": at - 0.5,
            "gps_end": at + 0.1,
            "found_snr": 9.0,
            "family": family,
        }
    )
    return conform(table, PLANTED)


def test_a_family_of_the_strain_is_vetoed_with_its_measured_loss(rng):
    """A quarter of the planted signals is sorted into the family: a quarter is lost."""
    config = settings(strain_families=["thunder"], max_dead_time=0.5)
    table = planted(40, ["thunder", "chirp_like", "chirp_like", "unknown"] * 10)
    verdict = judge(invented(rng), config, planted=table)
    a = row(verdict, "family-thunder")
    assert (a.category, a.source, a.family) == (3, "family", "thunder")
    assert a.signal_loss == pytest.approx(0.25, abs=0.06)
    assert row(verdict, "all").signal_loss >= a.signal_loss
    # not planted: nobody knows, and nobody is told a number
    verdict = judge(invented(rng), config)
    assert np.isnan(row(verdict, "family-thunder").signal_loss)
    assert np.isnan(row(verdict, "all").signal_loss)


def test_without_a_sorter_a_family_makes_no_veto(rng, caplog):
    config = settings(strain_families=["thunder"])
    verdict = judge(invented(rng, families=False), config)
    assert not verdict.cost.source.eq("family").any()
    assert "no transient is sorted into family 'thunder'" in caplog.text
    assert set(verdict.strain.family) == {"unsorted"}


def test_nothing_is_measured_where_it_is_switched_off(rng):
    config = settings(held_out_block_s=0.0, signal_times=0)
    verdict = judge(invented(rng), config)
    columns = ["held_out_efficiency", "held_out_low", "held_out_high", "signal_loss"]
    assert verdict.cost[columns].isna().all().all()


def test_planted_signals_round_trip_and_vanish(tmp_path):
    assert read_planted(tmp_path) is None
    table = planted(3, ["thunder", "unknown", "chirp_like"])
    write_optional(tmp_path / PLANTED_FILE, table, PLANTED)
    pd.testing.assert_frame_equal(read_planted(tmp_path), table)
    write_optional(tmp_path / PLANTED_FILE, None, PLANTED)
    assert list(tmp_path.iterdir()) == []
