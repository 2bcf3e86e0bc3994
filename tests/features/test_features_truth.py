"""Features of waveforms whose truth is known in closed form or was planted."""

import numpy as np
import pandas as pd
import pytest
from snippet_of import RATE, snippet_of

from dq.errors import InputError
from dq.features import FEATURES, NAMES, measure
from dq.features.scene import make_scene
from dq.observatory import waveforms as wf


def features_of(*snippets, **options):
    table = pd.DataFrame(
        {"gps_time": 100.0 * np.arange(len(snippets)), "frequency_hz": 100.0}
    )
    return measure(snippets, table, **options)


def gaussian(f, sigma):
    """Give a burst whose energy has the standard deviation ``sigma`` in time."""
    return lambda t: np.cos(2 * np.pi * f * t + 0.4) * np.exp(-(t**2) / (4 * sigma**2))


BURST = {"start_s": -0.1, "end_s": 0.1, "f_low_hz": 60.0, "f_high_hz": 160.0}


def test_there_are_at_least_forty_documented_features():
    assert len(FEATURES) >= 40
    assert len(set(NAMES)) == len(NAMES)
    for feature in FEATURES:
        assert feature.group
        assert feature.unit
        assert feature.meaning
        assert feature.source
    groups = [f.group for f in FEATURES]
    assert sorted(set(groups), key=groups.index) == [
        "extent",
        "spectrum",
        "energy",
        "ridge",
        "decay",
        "comb",
        "shape",
        "context",
    ]


def test_a_row_without_a_snippet_is_nan_and_others_hold_none(rng):
    good = snippet_of(gaussian(100, 0.02), snr=20, rng=rng, **BURST)
    table = features_of(None, good, None)
    assert list(table.columns) == list(NAMES)
    assert (table.dtypes == np.float64).all()
    assert table.iloc[[0, 2]].isna().all(axis=None)
    assert np.isfinite(table.iloc[1]).all()


def test_noise_alone_gives_finite_features(rng):
    silent = snippet_of(np.ones_like, snr=0, rng=rng, **BURST)
    empty = snippet_of(np.ones_like, snr=0, **BURST)
    assert np.isfinite(features_of(silent, empty)).all(axis=None)


def test_the_numbers_of_snippets_and_transients_must_agree():
    with pytest.raises(InputError, match="0 snippets for 1 transients"):
        measure([], pd.DataFrame({"gps_time": [0.0], "frequency_hz": [1.0]}))


def test_the_order_and_the_company_do_not_matter(rng):
    kinds = [(40, 0.1), (100, 0.02), (300, 0.005), (700, 0.3)]
    snippets = [
        snippet_of(
            gaussian(f, s),
            snr=15,
            rng=rng,
            start_s=-3 * s,
            end_s=3 * s,
            f_low_hz=f / 1.5,
            f_high_hz=f * 1.5,
        )
        for f, s in kinds
    ]
    together = features_of(*snippets)
    backwards = features_of(*snippets[::-1])[::-1]
    alone = pd.concat([features_of(s) for s in snippets])
    shape = [f.name for f in FEATURES if f.group != "context"]
    np.testing.assert_allclose(together[shape], backwards[shape], rtol=1e-4, atol=1e-5)
    np.testing.assert_allclose(together[shape], alone[shape], rtol=1e-4, atol=1e-5)


def test_loudness_is_no_feature():
    # without noise, ten times the amplitude must change nothing that a sorter sees
    quiet, loud = (
        snippet_of(wave, snr=snr, **BURST)
        for wave in (gaussian(100, 0.02),)
        for snr in (300.0, 3000.0)
    )
    table = features_of(quiet, loud)
    np.testing.assert_allclose(table.iloc[0], table.iloc[1], rtol=0.02, atol=0.01)


@pytest.mark.parametrize(("f", "sigma"), [(60.0, 0.03), (150.0, 0.02), (400.0, 0.01)])
def test_a_gaussian_burst_has_its_frequency_duration_and_symmetry(f, sigma, rng):
    found = features_of(
        snippet_of(
            gaussian(f, sigma),
            snr=60,
            rng=rng,
            start_s=-4 * sigma,
            end_s=4 * sigma,
            f_low_hz=0.7 * f,
            f_high_hz=1.4 * f,
        )
    ).iloc[0]
    assert found.centroid_hz == pytest.approx(f, rel=0.03)
    assert found.line_frequency_hz == pytest.approx(f, abs=4)
    # between 5 and 95 % of a Gaussian lie 3.29 sigma; the tiles widen it by at most
    # their own sigma_t (Q 6 to 30), and the threshold at a quarter cuts the tails
    wide = np.hypot(sigma, 30 / (4 * np.pi * f))
    assert 2.0 * sigma < found.duration_s < 3.6 * wide
    assert abs(found.time_skewness) < 0.3
    assert found.front_share == pytest.approx(0.5, abs=0.08)
    assert found.time_symmetry > 0.85
    assert found.blob_count == 1


@pytest.mark.parametrize(
    ("f", "q", "tau"),
    # tau = Q / (pi f), textbook (from memory)
    [(60, 30, 0.159155), (200, 30, 0.0477465), (500, 1000, 0.636620)],
)
def test_decay_q_is_that_of_the_ringdown_formula(f, q, tau, rng):
    found = features_of(
        *(
            snippet_of(
                lambda t: wf.ringdown(t, frequency_hz=f, q=q, phase=0.3),
                snr=snr,
                rng=rng,
                start_s=-0.02,
                end_s=3 * tau,
                f_low_hz=0.8 * f,
                f_high_hz=1.25 * f,
            )
            for snr in (40, 60, 80)
        )
    )
    assert found.decay_s.median() == pytest.approx(tau, rel=0.15)
    assert found.decay_q.median() == pytest.approx(q, rel=0.15)
    assert (found.front_share < 0.4).all()
    assert (found.decay_balance > 0).all()


@pytest.mark.parametrize("slope", [400.0, -400.0, 1500.0])
def test_a_linear_sweep_has_its_slope(slope, rng):
    def wave(t):
        envelope = np.exp(-((t / 0.1) ** 2) / 2)
        return envelope * np.cos(2 * np.pi * (300 * t + slope * t**2 / 2))

    found = features_of(
        snippet_of(
            wave,
            snr=60,
            rng=rng,
            start_s=-0.2,
            end_s=0.2,
            f_low_hz=80,
            f_high_hz=600,
        )
    ).iloc[0]
    # the energy of a sweep lies on its line; the tiles' width pulls the fit to less
    assert found.ridge_slope_hz_s == pytest.approx(slope, rel=0.25)
    assert np.sign(found.line_fit) == np.sign(slope)
    assert abs(found.line_fit) > 0.8
    assert np.sign(found.late_rise_octaves) == np.sign(slope)


def test_an_arch_of_scattered_light_has_its_top_and_its_bend(rng):
    # f = 2 n |v| / lambda, Accadia et al. 2010, CQG 27 194011 (from memory); A = 20 um,
    # 0.1 Hz and four passes give 94.484 Hz at the top
    def arch(t):
        inside = np.abs(t) < 2.4
        return inside * wf.fringes(20e-6 * np.sin(2 * np.pi * 0.1 * t), passes=4)

    found = features_of(
        snippet_of(
            arch, snr=80, rng=rng, start_s=-2, end_s=2, f_low_hz=20, f_high_hz=120
        )
    ).iloc[0]
    assert found.high_frequency_hz == pytest.approx(94.484, rel=0.08)
    assert found.bend_octaves < -0.3
    assert found.bent_fit > 0.7
    assert abs(found.line_fit) < 0.3
    assert found.middle_rise_octaves > 0.2


@pytest.mark.parametrize(
    ("mass", "snr", "expected"),
    # leading order, Peters & Mathews 1963: (m1 m2)^(3/5) / (m1 + m2)^(1/5)
    [(10.0, 60, 8.705506), (20.0, 60, 17.41101), (30.0, 40, 26.11652)],
)
def test_an_inspiral_has_its_chirp_mass(mass, snr, expected, rng):
    duration = float(wf.chirp_time(30.0, chirp_mass=wf.chirp_mass(mass, mass)))
    found = features_of(
        snippet_of(
            lambda t: wf.chirp(t, mass_1=mass, mass_2=mass, start_hz=24.0),
            snr=snr,
            rng=rng,
            start_s=-0.8 * duration,
            end_s=0.0,
            f_low_hz=25,
            f_high_hz=300,
        )
    ).iloc[0]
    assert found.chirp_fit > 0.8
    assert found.ridge_slope_hz_s > 0
    assert found.chirp_mass_sun == pytest.approx(expected, rel=0.3)


@pytest.mark.parametrize("mains", [50.0, 60.0])
def test_a_mains_burst_stands_on_the_comb_of_its_own_mains(mains, rng):
    harmonics = {1: 1.0, 2: 0.8, 3: 0.9, 5: 0.7}
    phases = dict.fromkeys(harmonics, 0.5)

    def wave(t):
        return wf.mains_comb(
            t,
            harmonics=harmonics,
            phases=phases,
            rise_s=0.004,
            decay_s=0.15,
            base_hz=mains,
        )

    options = {"start_s": -0.02, "end_s": 0.4, "f_low_hz": 40, "f_high_hz": 320}
    snippet = snippet_of(wave, snr=40, rng=rng, **options)
    right = features_of(snippet, mains_hz=mains).iloc[0]
    wrong = features_of(snippet, mains_hz=110.0 - mains).iloc[0]
    assert right.comb_strength > 0.75
    assert right.comb_contrast > 0.9
    assert right.comb_teeth == 4
    assert wrong.comb_strength < 0.6
    assert wrong.comb_contrast < 0.7
    # amplitudes squared: 1 + .81 + .49 of 2.94 at odd harmonics
    assert right.comb_odd == pytest.approx(2.3 / 2.94, abs=0.06)
    assert right.mode_count == 4


def test_separate_bursts_are_separate_blobs(rng):
    def wave(t):
        near = gaussian(100, 0.01)
        return near(t + 0.25) + near(t - 0.25)

    options = {"start_s": -0.35, "end_s": 0.35, "f_low_hz": 60, "f_high_hz": 160}
    found = features_of(
        snippet_of(wave, snr=40, rng=rng, **options),
        snippet_of(gaussian(100, 0.01), snr=40, rng=rng, **options),
    )
    assert found.blob_count.tolist() == [2.0, 1.0]
    assert found.largest_blob[0] == pytest.approx(0.5, abs=0.15)


def test_polarity_turns_with_the_sign(rng):
    def pulse(t):
        return np.exp(-((t / 0.004) ** 2))

    options = {"start_s": -0.03, "end_s": 0.03, "f_low_hz": 20, "f_high_hz": 120}
    up, down = (
        snippet_of(lambda t, s=s: s * pulse(t), snr=40, rng=rng, **options)
        for s in (1, -1)
    )
    tone = snippet_of(gaussian(60, 0.1), snr=40, rng=rng, **options)
    found = features_of(up, down, tone)
    assert found.polarity[0] > 0.2
    assert found.polarity[1] < -0.2
    assert abs(found.polarity[2]) < 0.2
    assert found.step[2] < min(found.step[0], found.step[1])


def test_saturated_time_is_handed_on(rng):
    found = features_of(
        snippet_of(gaussian(100, 0.02), snr=20, rng=rng, flat_s=0.05, **BURST)
    ).iloc[0]
    assert found.flat_s == 0.05
    assert found.flat_share == pytest.approx(0.25)


def test_the_loudest_tile_is_the_sum_over_its_window(rng):
    from dq.tiles.kernels import single_tile

    snippet = snippet_of(gaussian(130, 0.02), snr=25, rng=rng, **BURST)
    scene = make_scene([snippet])
    peak = scene.peak[0]
    spectrum = np.fft.rfft(snippet.values) / np.sqrt(len(snippet.values))
    # Q of the row from its sigma_t = Q / (4 pi f)
    f, t = scene.tiles.frequency[peak], scene.tiles.time[peak]
    q = 4 * np.pi * f * scene.tiles.sigma_t[peak]
    tile = single_tile(
        spectrum.astype(np.complex64), len(snippet.values), RATE, t, f, q
    )
    assert scene.tiles.energy[peak] == pytest.approx(abs(tile) ** 2, rel=1e-3)


def test_energies_are_divided_by_what_noise_has_in_the_row(rng):
    from dataclasses import replace

    snippet = snippet_of(gaussian(130, 0.02), snr=25, rng=rng, **BURST)
    half = replace(snippet, density=0.5 * snippet.density)
    whole, doubled = make_scene([snippet]), make_scene([half])
    top = whole.tiles.energy[whole.peak[0]]
    assert doubled.tiles.energy[doubled.peak[0]] == pytest.approx(2 * top, rel=1e-5)


def test_the_notch_of_a_line_counts_as_noise_not_as_less(rng):
    from dataclasses import replace

    # noise with a notch around 50 Hz, as whitening leaves it at a strong line
    snippet = snippet_of(np.ones_like, snr=0, rng=rng, **BURST)
    spectrum = np.fft.rfft(snippet.values)
    f = np.fft.rfftfreq(len(snippet.values), 1 / RATE)
    spectrum[(f > 40) & (f < 60)] *= 0.1
    notched = replace(
        snippet,
        values=np.fft.irfft(spectrum).astype(np.float32),
        density=np.where((snippet.frequency > 40) & (snippet.frequency < 60), 0.01, 1),
    )
    excess = make_scene([notched]).excess[0]
    assert abs(excess[(f > 45) & (f < 55)].mean()) < 0.1
    assert abs(excess[(f > 100) & (f < 900)].mean()) < 0.3
