"""Derived channels in the night: planted motion, range, gaps, state, tables."""

import numpy as np
import pandas as pd
import pytest
from memory_channel import NS, MemoryChannel

from dq.config import parse_config
from dq.errors import ConfigError
from dq.night.channel import analyse_channel
from dq.night.ledger import make_ledger
from dq.night.motion_plan import plan_motion
from dq.night.state import load_state, save_state
from dq.segments import Segments
from dq.store import Channel

GPS = 1_420_000_000 - 1_420_000_000 % 1024
RATE = 32
LASER_UM = 1.064
ROW = Channel("OV-A", "auxiliary", safe="yes", quantity="displacement", unit="um")


def config(*, block_s=64, **witnesses):
    return parse_config(
        {
            "site": {"name": "Orrin Vale", "strain": "OV-STRAIN"},
            "data": {"files": ["x.h5"], "channels": "channels.csv"},
            "tiles": {"block_s": block_s},
            "witnesses": witnesses,
        }
    )


def swing(t, start, end, amplitude, frequency):
    inside = (t >= start) & (t < end)
    return np.where(inside, amplitude * np.sin(2 * np.pi * frequency * (t - start)), 0)


@pytest.fixture(scope="module")
def ground():
    rng = np.random.default_rng(3)
    x = 1e-3 * np.cumsum(rng.standard_normal(7000 * RATE))
    t = np.arange(len(x)) / RATE
    return x - np.mean(x) + swing(t, 3000, 3060, 10.0, 0.2)


def analyse(values, *, low=0, high=None, rate=RATE, row=ROW, settings=None, ready=None):
    data = MemoryChannel(row.name, rate, GPS * NS, values)
    settings = settings or config()
    high = len(values) / rate if high is None else high
    return analyse_channel(
        data,
        ready=ready,
        start_ns=(GPS + low) * NS,
        end_ns=round((GPS + high) * NS),
        config=settings,
        motion=plan_motion(row, rate, "", settings, 10.0),
    )


def test_a_planted_swing_is_found_from_its_start_to_its_end(ground):
    found = analyse(ground).derived
    # v_max = 2 pi f A = 12.6 um/s: 2 v / lambda = 23.6 Hz
    fringe = found["OV-A@fringe-n1"].transients
    assert fringe.gps_start.min() == pytest.approx(GPS + 3000, abs=0.5)
    assert fringe.gps_end.max() == pytest.approx(GPS + 3060, abs=0.5)
    top = 2 * 2 * np.pi * 0.2 * 10.0 / LASER_UM
    assert fringe.snr.max() == pytest.approx(top / 10.0, rel=0.1)
    # above the edge while |cos| > 10 / 23.6
    active = (fringe.gps_end - fringe.gps_start).sum()
    assert active == pytest.approx(60 * 2 / np.pi * np.arccos(10 / top), rel=0.08)
    level = found["OV-A@rms-0.125-0.25Hz"].transients
    # half the level is reached at the edges, blurred by two periods of the lower edge
    loud = level[level.snr > level.snr.max() / 2]
    assert loud.gps_start.min() == pytest.approx(GPS + 3000, abs=5)
    assert loud.gps_end.max() == pytest.approx(GPS + 3060, abs=5)
    assert loud.amplitude.max() == pytest.approx(10 / np.sqrt(2), rel=0.05)
    assert np.all(level.q == np.sqrt(2))
    for name in ("OV-A@rms-1-2Hz", "OV-A@rms-2-4Hz"):
        away = found[name].transients.gps_time - GPS
        assert not np.any(
            (away > 3003) & (away < 3057) & (found[name].transients.snr > 9)
        )


def test_ranges_agree_on_their_overlap(ground):
    whole, part = analyse(ground), analyse(ground, low=2500, high=3300)
    assert set(whole.derived) == set(part.derived)
    rows = 0
    for name, one in whole.derived.items():
        two = part.derived[name]
        inside = one.transients.gps_start >= GPS + 2504
        inside &= one.transients.gps_end <= GPS + 3296
        also = two.transients.gps_start >= GPS + 2504
        also &= two.transients.gps_end <= GPS + 3296
        a = one.transients[inside].reset_index(drop=True)
        b = two.transients[also].reset_index(drop=True)
        pd.testing.assert_frame_equal(a, b, check_exact=True)
        rows += len(a)
        span = Segments.of([((GPS + 2504) * NS, (GPS + 3296) * NS)])
        assert one.analysed & span == two.analysed & span == span
        asked = Segments.of([((GPS + 2500) * NS, (GPS + 3300) * NS)])
        assert not two.analysed - asked
        assert two.transients.gps_start.min() >= GPS + 2500
        assert two.transients.gps_end.max() <= GPS + 3300
    assert rows > 150


@pytest.mark.parametrize("block_s", [32, 100])
def test_other_block_lengths_give_the_same_rows(ground, block_s):
    one = analyse(ground).derived
    two = analyse(ground, settings=config(block_s=block_s)).derived
    for name in one:
        a, b = one[name].transients, two[name].transients
        assert one[name].analysed == two[name].analysed
        # sums in another order may put a level on the other side of a step
        assert abs(len(a) - len(b)) <= 2
        if len(a) == len(b):
            np.testing.assert_allclose(a.snr, b.snr, rtol=1e-5)


def test_missing_samples_are_never_filled(ground):
    values = ground.copy()
    values[2000 * RATE : 2010 * RATE] = np.nan
    found = analyse(values)
    gap = Segments.of([((GPS + 2000) * NS, (GPS + 2010) * NS)])
    for name, one in found.derived.items():
        assert (one.analysed & gap).total_ns == 0, name
        near = one.transients[
            (one.transients.gps_end > GPS + 2000)
            & (one.transients.gps_start < GPS + 2010)
        ]
        assert len(near) == 0
    # the settling grows with the period: at 0.125 Hz 29 s of filter, 8 s of window
    # and up to 12 s of rate halvings, at each of four ends
    lost = 7000 - 10 - found.derived["OV-A@rms-0.125-0.25Hz"].analysed.total_s
    assert 4 * 30 < lost < 4 * 50
    assert 7000 - 10 - found.derived["OV-A@fringe-n1"].analysed.total_s < 4 * 1.5


def test_only_ready_time_is_read(ground):
    ready = Segments.of([((GPS + 1000) * NS, (GPS + 6000) * NS)])
    loud = ground.copy()
    loud[: 999 * RATE] += 1e3 * np.sin(np.arange(999 * RATE))
    one, two = analyse(ground, ready=ready), analyse(loud, ready=ready)
    for name in one.derived:
        a, b = one.derived[name], two.derived[name]
        pd.testing.assert_frame_equal(a.transients, b.transients, check_exact=True)
        assert not a.analysed - ready


def test_a_sensor_at_rest_in_a_band_has_no_level_there(rng):
    values = np.round(0.3 * rng.standard_normal(2048 * 64)) * 0 + 7.0
    values[1000 * 64 : 1001 * 64] += 1.0
    found = analyse(values, rate=64).derived
    for name, one in found.items():
        if "@rms" in name:
            assert len(one.transients) == 0
            assert not one.analysed


def test_a_velocity_sensor_s_offset_is_no_speed(rng):
    row = Channel("OV-A", "auxiliary", quantity="velocity", unit="um/s")
    values = 30.0 + 0.1 * rng.standard_normal(600 * RATE)
    assert len(analyse(values, row=row).derived["OV-A@fringe-n1"].transients) == 0


def test_what_is_derived_follows_list_and_settings():
    def names(row=ROW, rate=32.0, **settings):
        plan = plan_motion(row, rate, "", config(**settings), 10.0)
        return plan.names("OV-A") if plan else []

    assert len(names()) == 7 + 3
    assert names(fringe_passes=[], rms_low_hz=1.0, rms_high_hz=4.5) == [
        "OV-A@rms-1-2Hz",
        "OV-A@rms-2-4Hz",
    ]
    assert names(rate=1024.0) == [f"OV-A@fringe-n{n}" for n in (1, 2, 4)]
    assert names(rate=1024.0, slow_max_rate_hz=1024.0)[0] == "OV-A@rms-0.0625-0.125Hz"
    assert names(Channel("OV-A", "auxiliary", safe="no")) == []
    assert names(Channel("OV-A", "strain")) == []
    assert names(Channel("OV-A", "auxiliary"), slow_max_rate_hz=0.0) == []
    unknown = Channel("OV-A", "auxiliary", quantity="displacement", unit="count")
    plan = plan_motion(unknown, 32.0, "", config(), 10.0)
    assert plan.source is None
    assert plan.notes == (
        "no fringe frequency: unit 'count' is no displacement; give m with an SI "
        "prefix (such as um) in the channel list",
    )
    blank = Channel("OV-A", "auxiliary", quantity="velocity")
    assert plan_motion(blank, 32.0, "mm/s", config(), 10.0).source.scale == 1e-3
    assert "below 16 Hz" in plan_motion(blank, 8.0, "mm/s", config(), 10.0).notes[0]


def test_a_state_holds_the_derived_channels(tmp_path, ground):
    result = analyse(ground, low=2900, high=3200)
    save_state(tmp_path / "x.h5", "key", result)
    back = load_state(tmp_path / "x.h5", "key")
    assert set(back.derived) == set(result.derived)
    for name, one in result.derived.items():
        two = back.derived[name]
        assert (two.sample_rate, two.f_low_hz) == (one.sample_rate, one.f_low_hz)
        assert two.analysed == one.analysed
        pd.testing.assert_frame_equal(two.transients, one.transients, check_exact=True)


def test_derived_channels_stand_in_the_night_s_tables(ground):
    strain = Channel("OV-STRAIN", "strain")
    result = analyse(ground, low=2000, high=4000)
    ledger = make_ledger([strain, ROW], {"OV-A": result}, {"OV-STRAIN": "none"})
    rows = ledger.channels.set_index("channel")
    assert len(rows) == 2 + 10
    one = rows.loc["OV-A@fringe-n2"]
    assert (one["role"], one["safe"], one["status"]) == ("auxiliary", "yes", "ok")
    for name in rows.index[rows["status"] == "ok"]:
        row = rows.loc[name]
        assert row["analysed_s"] + row["missing_s"] + row["unjudged_s"] == 2000.0
        assert row["transients"] == len(ledger.transients[name])
    assert ledger.time("analysed")["OV-A@fringe-n2"].total_s == one["analysed_s"]


def test_each_kind_has_its_ladder():
    settings = config().witnesses
    assert settings.ladder("OV-A") == settings.snr_thresholds
    assert settings.ladder("OV-A@rms-1-2Hz") == settings.rms_thresholds
    assert settings.ladder("OV-A@fringe-n2") == settings.fringe_thresholds
    assert settings.ladder("OV-A@product-OV-B") == settings.snr_thresholds
    for wrong in ({"rms_thresholds": [3, 2]}, {"fringe_passes": [0, 1]}):
        with pytest.raises(ConfigError, match="positive and rising"):
            config(**wrong)
    with pytest.raises(ConfigError, match="each pair once"):
        config(products=[{"fast": "OV-A", "slow": "OV-A"}])
    with pytest.raises(ConfigError, match="nearest known key is 'slow_max_rate_hz'"):
        config(slow_max_rate=3)


def test_check_says_what_is_derived(small_site):
    from dq.config import load_config
    from dq.night.check import check_inputs
    from dq.night.inputs import read_inputs

    path = small_site(
        dead=False, extra='[[witnesses.products]]\nfast = "OV-A"\nslow = "OV-B"\n'
    )
    (path.parent / "channels.csv").write_text(
        "channel,role,safe,quantity,unit\nOV-STRAIN,strain,,,\n"
        "OV-A,auxiliary,,displacement,um\nOV-B,auxiliary,,velocity,count\n"
    )
    text = check_inputs(read_inputs(load_config(path))).text()
    assert "level in octave bands  2: OV-A, OV-B" in text
    assert "fringe frequency       1: OV-A\n" in text
    assert "products               OV-A@product-OV-B\n" in text
    assert "derived witnesses      20\n" in text
    assert "odd: OV-B: no fringe frequency: unit 'count' is no velocity" in text


def test_a_new_setting_of_the_motion_makes_a_new_state(small_site, tmp_path):
    from dq.config import load_config
    from dq.night.inputs import read_inputs
    from dq.night.plan import plan_night

    path = small_site(dead=False)
    text = path.read_text()

    def keys(extra):
        path.write_text(text + extra)
        inputs = read_inputs(load_config(path))
        start = 1420000000 * NS
        plan = plan_night(inputs, start, start + 200 * NS, tmp_path)
        return {t.channel: t.key for t in plan.tasks}

    before = keys("")
    after = keys("[witnesses]\nrms_high_hz = 8\n")
    assert before["OV-STRAIN"] == after["OV-STRAIN"]
    assert before["OV-A"] != after["OV-A"]
    # what only the statistics use leaves the channels' results as they are
    assert keys("[witnesses]\nmin_coincidences = 4\n") == before
