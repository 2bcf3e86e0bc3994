"""Amplitude and phase of the matching tile against planted values."""

import numpy as np
import pytest
from memory_channel import NS, MemoryChannel

from dq.config import parse_config
from dq.errors import PlanError
from dq.night.channel import analyse_channel
from dq.tiles import tile_phase

GPS, RATE, SECONDS = 1_420_000_000, 4096, 8


def sine_gaussian(t, *, f0, q_burst, h_rss, phase):
    """Make h0 cos(2 pi f0 t + phase) exp(-t^2 / tau^2) of a root-sum-square."""
    tau = q_burst / (np.sqrt(2) * np.pi * f0)
    h = np.cos(2 * np.pi * f0 * t + phase) * np.exp(-((t / tau) ** 2))
    # the sum over samples is the integral times the rate
    return h * h_rss / np.sqrt(np.sum(h**2) / RATE)


def tile_of(x, **place):
    spectrum = (np.fft.rfft(x) / np.sqrt(len(x))).astype(np.complex64)
    return tile_phase(spectrum, samples=len(x), sample_rate=float(RATE), **place)


#: f0, Q of burst papers, h_rss, sqrt(S), rho = sqrt(2) h_rss / sqrt(S) (Sutton 2013,
#: from memory; values recomputed). The tile that matches has sqrt(2) times that Q.
PLANTED = [
    (100.0, 9.0, 1e-21, 1e-22, 14.1421),
    (250.0, 3.0, 1e-22, 1e-23, 14.1421),
    (1000.0, 100.0, 1e-21, 5e-23, 28.2843),
]


@pytest.mark.reference
@pytest.mark.parametrize(("f0", "q", "h_rss", "root_s", "rho"), PLANTED)
@pytest.mark.parametrize("phase", [-2.5, 0.0, 0.9, 3.0])
def test_without_noise_phase_and_snr_are_the_planted_ones(
    f0, q, h_rss, root_s, rho, phase
):
    t = np.arange(SECONDS * RATE) / RATE - 4.0123
    h = sine_gaussian(t, f0=f0, q_burst=q, h_rss=h_rss, phase=phase)
    white = h / (root_s * np.sqrt(RATE / 2))
    place = {"time_s": 4.0123, "frequency": f0, "q": np.sqrt(2) * q}
    found, energy = tile_of(white, **place)
    assert np.angle(np.exp(1j * (found - phase))) == pytest.approx(0, abs=2e-3)
    # the bisquare window shares 0.99505 of the Gaussian's energy
    assert energy == pytest.approx(0.99505 * rho**2 / 2, rel=2e-3)


def test_in_noise_the_phase_errs_by_one_over_rho():
    rng = np.random.default_rng(8)
    t = np.arange(SECONDS * RATE) / RATE - 4.0
    place = {"time_s": 4.0, "frequency": 150.0, "q": 12.0}
    for rho in (8.0, 20.0):
        errors = []
        for _ in range(300):
            phase = rng.uniform(-np.pi, np.pi)
            h = sine_gaussian(
                t, f0=150.0, q_burst=12 / np.sqrt(2), h_rss=1, phase=phase
            )
            x = rng.standard_normal(len(t)) + h * rho / np.sqrt(RATE)
            found, _ = tile_of(x, **place)
            errors.append(np.angle(np.exp(1j * (found - phase))))
        # 300 trials know a standard deviation to 4 %
        assert np.std(errors) == pytest.approx(1 / rho, rel=0.15)
        assert abs(np.mean(errors)) < 3 / rho / np.sqrt(300)


def test_a_later_tile_sees_the_phase_turned_on():
    t = np.arange(SECONDS * RATE) / RATE - 4.0
    h = sine_gaussian(t, f0=80.0, q_burst=20.0, h_rss=1, phase=0.4)
    early, _ = tile_of(h, time_s=4.0, frequency=80.0, q=28.3)
    late, _ = tile_of(h, time_s=4.001, frequency=80.0, q=28.3)
    assert late - early == pytest.approx(2 * np.pi * 80.0 * 0.001, rel=0.01)


@pytest.mark.parametrize(("frequency", "q"), [(100.0, 3.0), (1600.0, 8.0)])
def test_a_tile_beyond_the_band_is_refused(frequency, q):
    with pytest.raises(PlanError, match="must lie within 0 to 2048 Hz"):
        tile_of(np.zeros(RATE), time_s=0.5, frequency=frequency, q=q)


@pytest.mark.reference
def test_the_tables_amplitude_is_the_planted_root_sum_square():
    # Sutton 2013 (from memory): rho = sqrt(2) h_rss / sqrt(S); first row of PLANTED,
    # and twice its amplitude
    rng = np.random.default_rng(21)
    root_s, seconds = 1e-22, 200
    x = rng.standard_normal(seconds * RATE) * root_s * np.sqrt(RATE / 2)
    t = np.arange(len(x)) / RATE
    times = 50 + 10 * np.arange(10) + rng.random(10)
    amplitudes = np.where(np.arange(10) % 2, 2e-21, 1e-21)
    for t0, h_rss in zip(times, amplitudes, strict=True):
        phase = rng.uniform(-np.pi, np.pi)
        x += sine_gaussian(t - t0, f0=100.0, q_burst=9.0, h_rss=h_rss, phase=phase)
    settings = parse_config(
        {
            "site": {"name": "Orrin Vale", "strain": "OV-STRAIN"},
            "data": {"files": ["x.h5"], "channels": "channels.csv"},
        }
    )
    table = analyse_channel(
        MemoryChannel("OV-STRAIN", RATE, GPS * NS, x),
        ready=None,
        start_ns=GPS * NS,
        end_ns=(GPS + seconds) * NS,
        config=settings,
    ).transients
    ratios = []
    for t0, h_rss in zip(times, amplitudes, strict=True):
        near = table[(table.gps_start < GPS + t0) & (table.gps_end > GPS + t0)]
        best = near.loc[near.snr.idxmax()]
        rho = np.sqrt(2) * h_rss / root_s
        ratios.append(best.amplitude / h_rss)
        assert best.amplitude == pytest.approx(h_rss, abs=3 * h_rss / rho)
        assert best.snr == pytest.approx(rho, abs=3)
    # noise averages out over ten: what is left is the tiles' loss and the window's
    assert np.mean(ratios) == pytest.approx(1.0, abs=0.06)
