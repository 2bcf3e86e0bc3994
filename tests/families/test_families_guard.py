"""Simulated chirps against the leading-order law; replanted examples."""

import numpy as np
import pytest
from scipy import signal, stats

from dq import chirp as law
from dq.config import NEVER_VETOED
from dq.families import guard
from dq.families.replant import draw_snrs, faded_snippet, replant
from dq.observatory import waveforms


@pytest.mark.reference
@pytest.mark.parametrize(
    ("mass", "chirp", "at_150ms", "at_1s", "left_20", "left_40", "last"),
    [
        (30.0, 26.11652, 40.0393, 19.6572, 0.954939, 0.150394, 73.286),
        (1.4, 1.218771, 271.868, 133.472, 157.869, 24.8629, 1570.42),
        (10.0, 8.705506, 79.5587, 39.0591, 5.95906, 0.938493, 219.859),
    ],
)
def test_leading_order_values(mass, chirp, at_150ms, at_1s, left_20, left_40, last):
    # Peters & Mathews 1963, Phys. Rev. 131 435, evaluated independently
    found = float(law.chirp_mass(mass, mass))
    assert found == pytest.approx(chirp, rel=1e-6)
    frequencies = law.chirp_frequency([0.15, 1.0], mass=found)
    np.testing.assert_allclose(frequencies, [at_150ms, at_1s], rtol=1e-5)
    left = law.time_to_coalescence([20.0, 40.0], mass=found)
    np.testing.assert_allclose(left, [left_20, left_40], rtol=1e-5)
    assert law.last_orbit_frequency(mass, mass) == pytest.approx(last, rel=1e-5)


def test_frequency_and_time_are_inverse():
    f = np.geomspace(10, 500, 20)
    tau = law.time_to_coalescence(f, mass=12.0)
    np.testing.assert_allclose(law.chirp_frequency(tau, mass=12.0), f, rtol=1e-12)


def test_the_waveform_sweeps_along_the_law():
    """The phase's slope, measured on the samples, is the leading-order frequency."""
    rate = 8192
    t = np.arange(-int(1.5 * rate), rate // 4) / rate
    wave = law.chirp_waveform(t, mass_1=20.0, mass_2=15.0, start_hz=20.0)
    phase = np.unwrap(np.angle(signal.hilbert(wave)))
    found = np.gradient(phase, t) / (2 * np.pi)
    mass = float(law.chirp_mass(20.0, 15.0))
    end = float(
        law.time_to_coalescence(law.last_orbit_frequency(20.0, 15.0), mass=mass)
    )
    inside = (t > -0.9) & (t < -2 * end)
    expected = law.chirp_frequency(-t[inside], mass=mass)
    assert np.median(np.abs(found[inside] / expected - 1)) < 0.005
    assert np.abs(wave).max() == pytest.approx(1.0, abs=0.15)
    assert np.abs(wave[t > 0.1]).max() < 1e-6


def test_the_invented_site_draws_the_same_law():
    """Two codes of the law, written apart, agree."""
    assert waveforms.chirp_mass(7.0, 40.0) == pytest.approx(law.chirp_mass(7.0, 40.0))
    np.testing.assert_allclose(
        waveforms.chirp_frequency(np.array([0.1, 2.0]), chirp_mass=9.0),
        law.chirp_frequency([0.1, 2.0], mass=9.0),
        rtol=1e-6,
    )


def test_masses_are_drawn_within_the_range_and_seeded():
    drawn = guard.draw_chirps(300, rng=np.random.default_rng(2))
    assert drawn == guard.draw_chirps(300, rng=np.random.default_rng(2))
    masses = np.array(drawn)[:, :2].ravel()
    assert masses.min() >= 5.0
    assert masses.max() <= 60.0
    law = stats.uniform(np.log(5.0), np.log(12.0))
    assert stats.kstest(np.log(masses), law.cdf).pvalue > 0.01


@pytest.mark.parametrize("wrong", [{"mass_1": 0.0}, {"start_hz": -1.0}])
def test_impossible_chirps_are_refused(wrong):
    good = {"mass_1": 5.0, "mass_2": 5.0, "start_hz": 20.0}
    with pytest.raises(ValueError, match="positive"):
        law.chirp_waveform(np.zeros(3), **{**good, **wrong})


def test_signals_and_unknowns_are_never_veto_targets():
    assert {guard.CHIRP_LIKE, *guard.RESERVED} == set(NEVER_VETOED)


def test_a_replanted_burst_has_the_asked_snr(rng):
    """Planted: the matched filter's mean output over many noises is the new SNR."""
    t = np.arange(-512, 512) / 1024
    wave = np.exp(-((t / 0.05) ** 2)) * np.sin(2 * np.pi * 80 * t)
    wave /= np.linalg.norm(wave)
    white = rng.normal(size=8192)
    white[4096 - 512 : 4096 + 512] += 40.0 * wave
    parent = white[4096 - 512 : 4096 + 512] @ wave
    snippet, fade = faded_snippet(white, centre=4096, half=512, taper=64)
    outputs = []
    for _ in range(200):
        noise = rng.normal(size=4096)
        planted = replant(snippet, fade, noise, at=2000, parent_snr=parent, snr=8.0)
        outputs.append(planted[2000 - 512 : 2000 + 512] @ wave)
        assert np.array_equal(planted[:1400], noise[:1400])
    assert np.mean(outputs) == pytest.approx(8.0, abs=0.3)
    # what is left of the noise around the copy's own
    assert np.std(outputs) == pytest.approx(np.sqrt(1 - (8 / parent) ** 2), abs=0.15)


def test_replanting_keeps_the_noise_at_unit_variance(rng):
    white = rng.normal(size=200_000)
    snippet, fade = faded_snippet(white, centre=50_000, half=40_000, taper=8_000)
    out = replant(
        snippet, fade, rng.normal(size=100_000), at=50_000, parent_snr=20.0, snr=10.0
    )
    assert out[10_000:90_000].std() == pytest.approx(1.0, abs=0.01)
    assert out[10_000:18_000].std() == pytest.approx(1.0, abs=0.03)


def test_what_cannot_be_replanted_is_refused(rng):
    white = rng.normal(size=1000)
    with pytest.raises(ValueError, match="leave the data"):
        faded_snippet(white, centre=10, half=100, taper=10)
    with pytest.raises(ValueError, match="taper"):
        faded_snippet(white, centre=500, half=100, taper=101)
    holed = np.where(np.arange(1000) == 480, np.nan, white)
    with pytest.raises(ValueError, match="missing"):
        faded_snippet(holed, centre=500, half=100, taper=10)
    snippet, fade = faded_snippet(white, centre=500, half=100, taper=10)
    with pytest.raises(ValueError, match=r"at most 0\.5"):
        replant(snippet, fade, white, at=500, parent_snr=10.0, snr=6.0)
    with pytest.raises(ValueError, match="does not fit"):
        replant(snippet, fade, white, at=50, parent_snr=20.0, snr=6.0)


def test_copies_are_drawn_between_the_threshold_and_half_the_parent(rng):
    drawn = draw_snrs(40.0, 500, lowest=6.0, rng=rng)
    assert drawn.min() >= 6.0
    assert drawn.max() <= 20.0
    assert len(draw_snrs(11.0, 5, lowest=6.0, rng=rng)) == 0
