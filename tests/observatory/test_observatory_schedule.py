"""What happens when, and who sees it: the planned night against its settings."""

import itertools
from collections import Counter
from dataclasses import replace

import numpy as np
import pytest

from dq.errors import InputError
from dq.observatory import COUPLINGS, FAMILY_RATES, SiteSettings
from dq.observatory.channels import AUXILIARY, STRAIN, strain_seen
from dq.observatory.families import DRAW
from dq.observatory.schedule import (
    STRAIN_LOW_HZ,
    Calendar,
    heavy_tail,
    plan_night,
    sample,
)
from dq.observatory.snr import NoiseModel

FAMILIES = tuple(f.family for f in FAMILY_RATES)


@pytest.fixture(scope="module")
def hour():
    return plan_night(SiteSettings())


@pytest.fixture(scope="module")
def long_night():
    return plan_night(SiteSettings(seed=5, duration_s=2 * 3600, own_glitch_scale=0.0))


def test_an_hour_holds_some_hundred_transients_of_every_family(hour):
    counts = Counter(t.family for t in hour.transients)
    assert 200 <= sum(counts.values()) <= 450
    families = {f.family for f in FAMILY_RATES}
    assert set(counts) == families | {"saturation", "test_signal"}
    assert min(counts.values()) >= 3
    assert counts["test_signal"] == 12


def test_snr_reaches_from_a_few_to_several_hundred(hour):
    snr = np.array([t.measured.snr for t in hour.transients if t.family in FAMILIES])
    assert snr.min() > 4.99
    assert snr.max() > 150
    assert np.median(snr) < 40


def test_heavy_tail_is_a_cut_pareto_law(rng):
    draws = np.array([heavy_tail(rng, 7.0, 400.0, 1.2) for _ in range(20_000)])
    assert draws.min() >= 7.0
    assert draws.max() <= 400.0
    cut = (7 / 400) ** 1.2
    for x in (10.0, 30.0, 100.0):
        expected = ((7 / x) ** 1.2 - cut) / (1 - cut)
        error = np.sqrt(expected * (1 - expected) / len(draws))
        assert np.mean(draws > x) == pytest.approx(expected, abs=4 * error)


def test_events_do_not_touch(hour):
    spans = sorted(
        (c.time_s - c.source.before_s, c.time_s + c.source.after_s)
        for c in hour.contributions[STRAIN]
    )
    for (_, end), (start, _) in itertools.pairwise(spans):
        assert start >= end + 0.299
    gap = [f / 4096 for f in (hour.gap.first, hour.gap.end)]
    assert all(end < gap[0] or start > gap[1] for start, end in spans)


def test_a_full_calendar_says_so(rng):
    calendar = Calendar(SiteSettings(duration_s=128))
    placed = [calendar.place(rng, 5.0, 5.0) for _ in range(40)]
    assert placed[0] is not None
    assert placed[-1] is None
    assert calendar.place(rng, 100.0, 100.0) is None


def test_truth_names_who_saw_what(hour):
    for t in hour.transients:
        known = {c.witness for c in COUPLINGS if c.family == t.family}
        assert set(t.seen_by) <= known
        if t.family in ("short_burst", "test_signal", "saturation"):
            assert t.witness == ""


def test_coupling_probabilities_hold(long_night):
    events = {t.event: t for t in long_night.transients}.values()
    for coupling in COUPLINGS:
        of = [e for e in events if e.family == coupling.family]
        seen = np.mean([coupling.witness in e.seen_by for e in of])
        p = coupling.probability
        error = np.sqrt(max(p * (1 - p), 1e-4) / len(of))
        assert seen == pytest.approx(p, abs=4 * error), coupling


def test_a_redundant_pair_sees_the_same_events(long_night):
    for t in long_night.transients:
        if t.family == "impact":
            assert ("OV-BENCH-ACC-1" in t.seen_by) == ("OV-BENCH-ACC-2" in t.seen_by)


def test_witnesses_lead_or_lag_by_their_delay(long_night):
    strain = {id(c.source): c for c in long_night.contributions[STRAIN]}
    for coupling in COUPLINGS:
        items = [
            c
            for c in long_night.contributions[coupling.witness]
            if id(c.source) in strain
        ]
        assert items
        for item in items:
            delay = strain[id(item.source)].time_s - item.time_s
            assert delay == pytest.approx(coupling.delay_s, abs=1e-9)


def test_witness_snr_follows_the_strain_s(long_night):
    coupling = next(c for c in COUPLINGS if c.family == "impact")
    spec = next(c for c in AUXILIARY if c.name == coupling.witness)
    model = NoiseModel(spec.seen, sample_rate=spec.rate, f_low_hz=spec.f_low_hz)
    strain = NoiseModel(strain_seen, sample_rate=4096, f_low_hz=STRAIN_LOW_HZ)
    by_source = {id(c.source): c for c in long_night.contributions[STRAIN]}
    ratios = []
    for item in long_night.contributions[coupling.witness]:
        other = by_source.get(id(item.source))
        if other is None:
            continue
        level = float(long_night.drift(other.time_s))
        wave, _ = sample(item.source, spec.rate, 0.45 * spec.rate)
        theirs = model.snr(item.amplitude * wave)
        wave, _ = sample(item.source, 4096, 0.45 * 4096)
        ratios.append(theirs / (strain.snr(other.amplitude * wave) / level))
    assert np.median(ratios) == pytest.approx(coupling.snr_ratio, rel=0.1)
    assert np.std(np.log(ratios)) == pytest.approx(0.2, rel=0.3)


def test_periodic_bystander_keeps_its_period(hour):
    times = np.array(
        [g.measured.peak_s for g in hour.own if g.channel == "OV-PUMP-CURRENT"]
    )
    assert len(times) > 90
    assert np.abs(np.diff(times) - 37.0).max() < 0.5


def test_bursty_bystander_is_no_poisson_process(hour):
    times = [g.measured.peak_s for g in hour.own if g.channel == "OV-LASER-POWER"]
    counts = np.histogram(times, bins=360, range=(0, 3600))[0]
    # a Poisson process has variance over mean of 1, within sqrt(2 / 360)
    assert counts.var() / counts.mean() > 1 + 5 * np.sqrt(2 / 360)


def test_arches_of_an_epoch_share_its_event_and_follow_the_swing(hour):
    arches = [t for t in hour.transients if t.family == "scattered_light"]
    by_event = Counter(t.event for t in arches)
    assert len(by_event) < len(arches)
    peaks = {}
    for t in arches:
        peaks.setdefault(t.event, []).append(t.measured.peak_s)
    steps = np.concatenate([np.diff(p) for p in peaks.values()])
    # one arch every 1 / (2 f_m), f_m between 0.12 and 0.24 Hz; faint ones are left out
    assert steps.min() > 0.6 * 0.5 / 0.24


@pytest.mark.parametrize("family", sorted(DRAW))
def test_a_source_is_negligible_beyond_its_reach(family, rng):
    for _ in range(5):
        source = DRAW[family](rng)
        time = np.arange(-source.before_s - 0.5, source.after_s + 0.5, 1 / 4096)
        wave = source.wave(time, 1800.0)
        outside = (time < -source.before_s) | (time > source.after_s)
        energy = np.sum(wave**2)
        assert energy > 0
        assert np.sum(wave[outside] ** 2) < 1e-5 * energy


@pytest.mark.parametrize("family", sorted(DRAW))
def test_a_source_keeps_below_the_frequency_that_a_channel_carries(family, rng):
    for _ in range(5):
        source = DRAW[family](rng)
        wave, _ = sample(source, 4096, 230.0)
        power = np.abs(np.fft.rfft(wave, 2 * len(wave))) ** 2
        f = np.fft.rfftfreq(2 * len(wave), 1 / 4096)
        if family in ("beat_note", "acoustic", "mains_burst"):
            assert power[f > 256].sum() < 0.01 * power.sum()


def test_rates_and_couplings_can_be_changed():
    settings = SiteSettings(duration_s=600).with_rates(impact=0.0, acoustic=120.0)
    night = plan_night(replace(settings, coupling_scale=0.0))
    counts = Counter(t.family for t in night.transients)
    assert counts["impact"] == 0
    assert counts["acoustic"] > 8
    assert not any(t.seen_by for t in night.transients)


def test_one_family_s_rate_leaves_the_others_draws_alone():
    quiet = SiteSettings(duration_s=600).with_rates(short_burst=0.0)
    before = plan_night(SiteSettings(duration_s=600)).transients
    after = plan_night(quiet).transients
    kept = [t for t in before if t.family != "short_burst"]
    assert [t.measured.snr for t in kept] == [t.measured.snr for t in after]


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"duration_s": 100}, r"duration_s=100 must lie within 128\.\.86400"),
        ({"noise_level": 0.0}, r"noise_level=0\.0 must lie within 0\.001\.\.1000"),
        ({"gap_s": -1.0}, r"gap_s=-1\.0 must lie within 0\.\.3600"),
        ({"seed": -1}, "seed=-1 must lie within"),
    ],
)
def test_impossible_settings_are_refused(change, message):
    with pytest.raises(InputError, match=message):
        SiteSettings(**change)


def test_an_unknown_family_is_refused():
    with pytest.raises(InputError, match="family 'thud' is unknown; known are"):
        SiteSettings().with_rates(thud=3)
