"""The move from the loudest tile to the maximum: exact sums, planted maxima, limits."""

import numpy as np
import pytest

from dq.tiles import climb_from, plan_tiles
from dq.tiles.climb import GROUPS, _energy_at, fold
from dq.tiles.kernels import single_tile

RATE, SECONDS = 2048.0, 32
SAMPLES = int(RATE * SECONDS)


@pytest.fixture(scope="module")
def plan():
    return plan_tiles(RATE, SAMPLES, f_low=10.0)


def white_spectrum(rng):
    z = rng.standard_normal(SAMPLES // 2 + 1) + 1j * rng.standard_normal(
        SAMPLES // 2 + 1
    )
    return (z / np.sqrt(2)).astype(np.complex64)


def atom(time_s, frequency, q, energy):
    """Spectrum of the atom that a tile matches, of a given tile energy."""
    f = np.arange(SAMPLES // 2 + 1) / SECONDS
    shape = np.exp(-((f - frequency) ** 2) * q * q / (4 * frequency**2))
    shape /= np.sqrt(np.sum(shape**2))
    return np.sqrt(energy) * shape * np.exp(-2j * np.pi * f * time_s)


@pytest.mark.parametrize(
    ("frequency", "q"), [(15.0, 60.0), (300.0, 4.5), (500.0, 20.0)]
)
def test_folded_tiles_equal_the_exact_sums(rng, frequency, q):
    """Slow twin: ``single_tile`` goes through every bin."""
    spectrum = white_spectrum(rng)
    time_s, length = 11.3, float(SECONDS)
    half = 2.2 * np.sqrt(11) * frequency / q
    low = int((frequency - half) * length)
    high = int((frequency + half) * length)
    size = max((high - low) // GROUPS, 1)
    folded = fold(spectrum, length, time_s, low, -(-(high - low) // size), size)
    grid = ((low + 0.5 * (size - 1)) / length, size / length, float(size))
    sigma_t = q / (4 * np.pi * frequency)
    limits = (1.0, 3.4, 200.0, RATE / 2)
    for dt, ratio_f, ratio_q in ((0, 1, 1), (0.7, 1, 1), (-0.7, 1 + 0.7 / q, 0.8)):
        place = np.array(
            [dt * sigma_t, np.log(frequency * ratio_f), np.log(q * ratio_q)]
        )
        ours = _energy_at(folded, grid, place, limits)
        exact = single_tile(
            spectrum,
            SAMPLES,
            RATE,
            time_s + dt * sigma_t,
            frequency * ratio_f,
            q * ratio_q,
        )
        # each tile's own energy scale is 1
        assert ours == pytest.approx(abs(exact) ** 2, rel=0.01, abs=0.01)


@pytest.mark.parametrize(("f0", "q0"), [(40.0, 12.0), (200.0, 8.0), (450.0, 40.0)])
def test_the_top_of_an_atom_is_found_from_a_plan_tile_away(plan, f0, q0):
    """Closed form: the atom's own place is the maximum, its energy 0.995 of all."""
    sigma_t = q0 / (4 * np.pi * f0)
    spectrum = atom(9.0, f0, q0, 400.0).astype(np.complex64)
    energy, time_s, frequency, q = climb_from(
        spectrum,
        plan,
        time_s=9.0 + 0.4 * sigma_t,
        frequency=f0 * (1 + 0.4 / q0),
        q=q0 * 1.3,
        q_range=(4.0, 64.0),
    )
    # bisquare against Gaussian of the same width: 0.99505 (recomputed)
    assert energy == pytest.approx(0.995 * 400, rel=0.004)
    assert abs(time_s - 9.0) < 0.05 * sigma_t
    assert abs(frequency / f0 - 1) < 0.05 / q0
    assert q == pytest.approx(q0, rel=0.1)


def test_noise_is_never_lowered_and_limits_hold(plan, rng):
    spectrum = white_spectrum(rng)
    for _ in range(30):
        f, q = float(rng.uniform(15, 300)), float(rng.uniform(5, 60))
        t = float(rng.uniform(5, 27))
        before = abs(single_tile(spectrum, SAMPLES, RATE, t, f, q)) ** 2
        energy, _, frequency, found_q = climb_from(
            spectrum, plan, time_s=t, frequency=f, q=q, q_range=(5.0, 60.0)
        )
        assert energy >= before * 0.99 - 0.01
        assert 5.0 <= found_q <= 60.0
        assert frequency >= plan.frequency.min()
