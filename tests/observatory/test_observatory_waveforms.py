"""Waveforms against the check values of their formulas."""

import numpy as np
import pytest
from scipy.integrate import quad

from dq.errors import InputError
from dq.observatory import waveforms as wf

# Peters & Mathews 1963, textbook form in Maggiore 2008: masses, chirp mass, frequency
# at 150 ms and 1 s, time from 20 and 40 Hz, frequency of the last stable orbit.
CHIRPS = [
    (30, 30, 26.11652, 40.0393, 19.6572, 0.954939, 0.150394, 73.286),
    (1.4, 1.4, 1.218771, 271.868, 133.472, 157.869, 24.8629, 1570.42),
    (10, 10, 8.705506, 79.5587, 39.0591, 5.95906, 0.938493, 219.859),
]


@pytest.mark.reference
@pytest.mark.parametrize("row", CHIRPS, ids=lambda r: f"{r[0]}+{r[1]}")
def test_chirp_formulas_have_their_check_values(row):
    m1, m2, mass, f150, f1000, t20, t40, last = row
    found = wf.chirp_mass(m1, m2)
    assert found == pytest.approx(mass, rel=1e-6)
    assert wf.chirp_frequency(0.150, chirp_mass=found) == pytest.approx(f150, rel=5e-6)
    assert wf.chirp_frequency(1.0, chirp_mass=found) == pytest.approx(f1000, rel=5e-6)
    assert wf.chirp_time(20, chirp_mass=found) == pytest.approx(t20, rel=5e-6)
    assert wf.chirp_time(40, chirp_mass=found) == pytest.approx(t40, rel=5e-6)
    assert wf.last_orbit_frequency(m1 + m2) == pytest.approx(last, rel=1e-5)


def instantaneous_frequency(wave, time):
    """Half cycles between zero crossings, as times and frequencies."""
    at = np.flatnonzero(np.diff(np.signbit(wave)))
    share = wave[at] / (wave[at] - wave[at + 1])
    zeros = time[at] + share * (time[1] - time[0])
    return 0.5 * (zeros[1:] + zeros[:-1]), 0.5 / np.diff(zeros)


def test_chirp_s_phase_turns_at_the_formula_s_frequency():
    time = np.arange(-1.2, 0.0, 1e-5)
    wave = wf.chirp(time, mass_1=30, mass_2=30, start_hz=20)
    middle, found = instantaneous_frequency(wave[wave != 0], time[wave != 0])
    expected = wf.chirp_frequency(-middle, chirp_mass=wf.chirp_mass(30, 30))
    # a half cycle in which f changes by x % is off by the order of x^2
    np.testing.assert_allclose(found[3:-4], expected[3:-4], rtol=2e-3)


def test_chirp_starts_at_its_frequency_and_ends_at_the_last_orbit():
    mass = wf.chirp_mass(30, 30)
    time = np.arange(-3.0, 0.5, 1e-4)
    inside = time[wf.chirp(time, mass_1=30, mass_2=30, start_hz=20) != 0]
    assert inside[0] == pytest.approx(-0.954939, abs=2e-4)
    end = wf.chirp_time(73.286, chirp_mass=mass)
    assert inside[-1] == pytest.approx(-end, abs=2e-4)


def test_chirp_from_beyond_the_last_orbit_is_refused():
    with pytest.raises(InputError, match=r"start_hz=80 must lie in 0\.\.73\.29 Hz"):
        wf.chirp(np.zeros(3), mass_1=30, mass_2=30, start_hz=80)


# Accadia et al. 2010, CQG 27 194011: f = 2 n |v| / lambda at 1064 nm.
@pytest.mark.reference
@pytest.mark.parametrize(
    ("speed_um", "frequency"),
    [(1, 1.87970), (5, 9.39850), (10, 18.7970), (25, 46.9925)],
)
def test_fringe_frequency_has_its_check_values(speed_um, frequency):
    found = wf.fringe_frequency(1e-6 * speed_um)
    assert found == pytest.approx(frequency, rel=5e-6)
    twice = wf.fringe_frequency(-1e-6 * speed_um, passes=2)
    assert twice == pytest.approx(2 * frequency, rel=5e-6)


# Amplitude (um), swing frequency, highest frequency for 1 pass, fringes per arch.
@pytest.mark.reference
@pytest.mark.parametrize(
    ("amplitude_um", "swing_hz", "top_hz", "fringes"),
    [
        (10, 0.15, 17.7157, 37.594),
        (20, 0.10, 23.6210, 75.188),
        (1, 0.20, 2.36210, 3.7594),
        (1, 3.0, 35.4315, 3.7594),
    ],
)
def test_arches_have_their_height_and_fringe_count(
    amplitude_um, swing_hz, top_hz, fringes
):
    def speed(t):
        turn = 2 * np.pi * swing_hz
        return 1e-6 * amplitude_um * turn * np.cos(turn * t)

    assert wf.fringe_frequency(speed(0.0)) == pytest.approx(top_hz, rel=5e-6)
    quarter = 0.25 / swing_hz
    found, _ = quad(lambda t: wf.fringe_frequency(speed(t)), -quarter, quarter)
    assert found == pytest.approx(fringes, rel=2e-5)


def test_fringes_of_a_steady_motion_are_a_tone_of_the_fringe_frequency():
    time = np.arange(0, 2, 1e-4)
    wave = wf.fringes(25e-6 * time, passes=2)
    _, found = instantaneous_frequency(wave, time)
    np.testing.assert_allclose(found, 2 * 46.9925, rtol=1e-4)


# Sutton 2013: frequency, Q, tau, amplitude for a root-sum-square.
@pytest.mark.reference
@pytest.mark.parametrize(
    ("frequency", "q", "rss", "tau", "amplitude"),
    [
        (100, 9, 1e-21, 0.02025712, 8.87557e-21),
        (250, 3, 1e-22, 0.00270095, 2.43082e-21),
        (1000, 100, 1e-21, 0.02250791, 8.42010e-21),
    ],
)
def test_sine_gaussian_has_its_rss_and_width(frequency, q, rss, tau, amplitude):
    unit = wf.sine_gaussian_rss(frequency_hz=frequency, q=q)
    assert rss / unit == pytest.approx(amplitude, rel=5e-6)
    step = 1e-6
    time = np.arange(-8 * tau, 8 * tau, step)
    wave = wf.sine_gaussian(time, frequency_hz=frequency, q=q)
    assert np.sqrt(np.sum(wave**2) * step) == pytest.approx(unit, rel=1e-6)
    quarter = 0.25 / frequency
    near = wf.sine_gaussian(np.array([quarter]), frequency_hz=frequency, q=q)
    assert near[0] == pytest.approx(np.exp(-((quarter / tau) ** 2)), rel=1e-6)


@pytest.mark.reference
@pytest.mark.parametrize(
    ("frequency", "q", "fall"),
    [
        (250, 3, 3.81972e-3),
        (60, 30, 0.159155),
        (500, 1e3, 0.636620),
        (1000, 1e6, 318.310),
    ],
)
def test_ringdown_falls_in_its_check_time(frequency, q, fall):
    found = wf.ringdown_time(frequency_hz=frequency, q=q)
    assert found == pytest.approx(fall, rel=2e-6)
    cycles = round(found * frequency) / frequency
    wave = wf.ringdown(np.array([-1e-6, 0.0, cycles]), frequency_hz=frequency, q=q)
    assert wave[0] == 0.0
    assert wave[1] == 1.0
    assert wave[2] == pytest.approx(np.exp(-cycles / found), rel=1e-5)


def test_beat_note_sweeps_through_zero_and_back():
    time = np.arange(-0.3, 0.3, 1e-5)
    wave = wf.beat_note(time, sweep=-2000.0, low_hz=20.0, high_hz=900.0)
    middle, found = instantaneous_frequency(wave, time)
    fast = (np.abs(middle) > 0.05) & (np.abs(middle) < 0.25)
    np.testing.assert_allclose(found[fast], 2000 * np.abs(middle[fast]), rtol=0.01)
    assert wave[np.argmin(np.abs(time))] == pytest.approx(0.0, abs=1e-9)


def test_beat_note_is_silent_beyond_its_read_out():
    high = wf.beat_note(np.array([1.0]), sweep=3000.0, low_hz=20.0, high_hz=900.0)
    assert np.abs(high[0]) < 1e-6


def test_mains_comb_stands_at_harmonics_only():
    time = np.arange(0, 4, 1 / 4096)
    wave = wf.mains_comb(
        time, harmonics={1: 1.0, 3: 0.5}, phases={1: 0, 3: 1}, rise_s=0.004, decay_s=0.5
    )
    power = np.abs(np.fft.rfft(wave)) ** 2
    f = np.fft.rfftfreq(len(time), 1 / 4096)
    near = (np.abs(f - 50) < 8) | (np.abs(f - 150) < 8)
    assert power[near].sum() > 0.97 * power.sum()
    assert f[np.argmax(power)] == pytest.approx(50.0, abs=0.3)


def test_noise_burst_has_the_mean_square_of_half_its_envelope(rng):
    time = np.array([0.0, 0.1])
    squares = [
        wf.noise_burst(
            time,
            frequencies_hz=rng.uniform(60, 300, 50),
            phases=rng.uniform(0, 2 * np.pi, 50),
            sigma_s=0.1,
        )
        ** 2
        for _ in range(4000)
    ]
    # mean square of N tones over sqrt(N) is 1/2, times the envelope's square
    np.testing.assert_allclose(np.mean(squares, axis=0), [0.5, 0.5 / np.e], rtol=0.1)


def test_swing_grows_from_rest_and_dies():
    time = np.array([-15.0, 0.0, 15.0, 20.0])
    found = wf.swing(
        time, amplitude=3.0, frequency_hz=0.2, duration_s=30.0, phase=np.pi / 2
    )
    np.testing.assert_allclose(found, [0.0, 3.0, 0.0, 0.0], atol=1e-12)
