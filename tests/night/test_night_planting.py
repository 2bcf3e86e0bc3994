"""Planted signals: waveforms, strength, places, and what the finder makes of them."""

import numpy as np
import pytest
from small_site import SITE_SECONDS, SITE_START

from dq.chirp import SOLAR_MASS_S
from dq.config import load_config
from dq.night import run_night, veto_again
from dq.night.find import find_in_channel
from dq.night.inputs import read_inputs
from dq.night.planting import SPACING_S, PlantedData, plan_runs, plant_signals
from dq.night.signals import Signal, draw_signal, optimal_snr
from dq.segments import NS, Segments
from dq.tables import PLANTED, csv_table

GPS = 1_420_000_000


def burst(snr=20.0, frequency=60.0, q=9.0, at=GPS):
    reach = 4 * q / (np.sqrt(2) * np.pi * frequency)
    return Signal(at * NS, "burst", snr, frequency, q, frequency, 0.0, reach, reach)


@pytest.mark.reference
def test_optimal_snr_of_a_burst_in_white_noise(rng):
    """rho^2 = 2 h_rss^2 / S for a narrow burst (Sutton 2013, from memory)."""
    rate, q, frequency = 1024.0, 9.0, 100.0
    noise = rng.standard_normal(int(64 * rate))
    time = (np.arange(2048) - 1024) / rate
    wave = burst(frequency=frequency, q=q).waveform(time)
    rss = np.sqrt(q * -np.expm1(-(q**2)) / (4 * np.sqrt(np.pi) * frequency))
    density = 2 / rate
    found = optimal_snr(wave, noise, sample_rate=rate, low_hz=20.0, high_hz=400.0)
    assert found == pytest.approx(np.sqrt(2 / density) * rss, rel=0.03)


@pytest.mark.reference
def test_chirp_frequency_follows_the_leading_order_law():
    """Follow 134 Hz (1.21 / Mc)^(5/8) (1 s / tau)^(3/8).

    Maggiore 2008, eq. 4.20, from memory; by the time between zero crossings.
    """
    mass, first = 10.0, 30.0
    tau0 = 5 / 256 * (np.pi * first) ** (-8 / 3) * (mass * SOLAR_MASS_S) ** (-5 / 3)
    signal = Signal(GPS * NS, "chirp", 10.0, first, mass, 400.0, 0.3, tau0, 0.0)
    rate = 65536.0
    time = -np.arange(int(tau0 * rate), 0, -1) / rate
    wave = signal.waveform(time)
    up = np.flatnonzero((wave[:-1] < 0) & (wave[1:] >= 0))
    middle, step = (time[up[:-1]] + time[up[1:]]) / 2, np.diff(time[up])
    for tau in (0.5 * tau0, 0.2 * tau0, 0.1 * tau0):
        near = np.argmin(np.abs(middle + tau))
        law = 134.0 * (1.21 / mass) ** 0.625 * (-middle[near]) ** -0.375
        assert 1 / step[near] == pytest.approx(law, rel=0.01)
    assert wave[time > -5e-4].max(initial=0.0) == 0.0


def test_signals_stay_in_the_band_and_are_short(rng):
    kinds = set()
    for _ in range(200):
        signal = draw_signal(GPS * NS, rng, low_hz=10.0, high_hz=1000.0)
        kinds.add(signal.kind)
        assert 8 <= signal.snr <= 25
        assert 10 <= signal.first_hz <= signal.last_hz <= 1000
        assert signal.before_s <= 4.0 + 1e-9
        wave = signal.waveform(np.linspace(-signal.before_s, signal.after_s, 5000))
        assert np.isfinite(wave).all()
        assert np.abs(wave).max() <= 1.2
    assert kinds == {"chirp", "burst"}


def test_runs_lie_in_analysed_time_and_hold_what_was_asked_for():
    analysed = Segments.from_seconds([GPS, GPS + 1000], [GPS + 700, GPS + 5000])
    for plants in (1, 7, 30, 64):
        runs = plan_runs(analysed, plants)
        times = [t for run in runs for t in run.times]
        assert len(times) == plants
        assert np.diff(times).min(initial=NS * 99) >= SPACING_S * NS
        for run in runs:
            assert not Segments.of([(run.start_ns, run.end_ns)]) - analysed
    assert plan_runs(Segments.from_seconds([GPS], [GPS + 5]), 10) == []
    assert plan_runs(analysed, 0) == []


@pytest.fixture(scope="module")
def site(tmp_path_factory):
    from small_site import write_site

    config = load_config(write_site(tmp_path_factory.mktemp("planting")))
    night = find_in_channel(
        config, "OV-STRAIN", start=SITE_START, end=SITE_START + SITE_SECONDS
    )
    return config, read_inputs(config), night


def test_samples_differ_by_the_signal_alone(site):
    _, inputs, _ = site
    data = inputs.store.channel("OV-STRAIN")
    signal = burst(at=SITE_START + 50)
    planted = PlantedData(data, [(signal, 3.0)])
    span = (SITE_START + 40) * NS, (SITE_START + 60) * NS
    (plain,), (changed,) = data.read(*span), planted.read(*span)
    time = np.arange(len(plain.values)) / 512 - 10
    expected = np.where(np.abs(time) <= signal.before_s, signal.waveform(time), 0) * 3
    np.testing.assert_allclose(changed.values - plain.values, expected, atol=1e-6)


def test_planted_bursts_are_found_and_sorted(site):
    config, inputs, night = site

    def plant(**options):
        return plant_signals(
            inputs.store.channel("OV-STRAIN"),
            night,
            ready=inputs.wanted,
            config=config,
            **options,
        )

    table = plant(sort=lambda found, data: ["thunder"] * len(found))
    bursts = table[table.kind == "burst"]
    assert len(table) >= 6
    assert bursts.found.all()
    ratio = (bursts.found_snr / bursts.snr).to_numpy(float)
    assert np.median(ratio) == pytest.approx(0.95, abs=0.1)
    assert set(table.family[table.found.astype(bool)]) == {"thunder"}
    again = plant()
    assert again.drop(columns="family").equals(table.drop(columns="family"))
    assert set(again.family.dropna()) - {""} <= {"unsorted"}


def test_a_night_that_vetoes_families_plants_signals(
    small_site, tmp_path, here, tree_of
):
    config = load_config(
        small_site(dead=False, extra='[vetoes]\nstrain_families = ["thunder"]\n')
    )
    span = {"start": SITE_START, "end": SITE_START + SITE_SECONDS}
    run_night(config, **span, out=tmp_path / "a", jobs=1)
    table = csv_table((tmp_path / "a" / "planted.csv").read_text(), PLANTED)
    assert len(table) >= 6
    assert table.found.astype(bool).mean() > 0.5
    run_night(config, **span, out=tmp_path / "b", jobs=1)
    veto_again(tmp_path / "b")
    one, two = (tree_of(tmp_path / name) for name in "ab")
    for name in ("planted.csv", "veto_cost.csv", "veto_curve.csv", "summary.json"):
        assert one[name] == two[name]
    assert run_night(config, **span, out=tmp_path / "a", jobs=1).nothing_to_do
