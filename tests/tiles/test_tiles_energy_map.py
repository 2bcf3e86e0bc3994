"""The energy map: no tile lost, each in its place, peaks where they were planted."""

import numpy as np
import pytest

from dq.errors import PlanError
from dq.tiles import plan_tiles, row_coefficients
from dq.tiles.energy_map import add_tiles, empty_map, row_edges

RATE, SECONDS = 256.0, 32


@pytest.fixture(scope="module")
def plan():
    return plan_tiles(RATE, int(RATE) * SECONDS, f_low=10.0, q_max=32.0)


def spectrum_of(x):
    return (np.fft.rfft(x) / np.sqrt(len(x))).astype(np.complex64)


def drawn(plan, spectrum, low=4.0, high=28.0, **shape):
    picture = empty_map(plan, start_s=low, end_s=high, **shape)
    level = np.ones(len(plan.q))
    add_tiles(
        picture, spectrum, plan, level=level, origin_s=0.0, low_s=low, high_s=high
    )
    return picture


def test_rows_of_a_plane_share_its_band_without_gap_or_overlap(plan):
    low, high = row_edges(plan)
    for plane in np.unique(plan.plane):
        rows = plan.plane == plane
        np.testing.assert_allclose(low[rows][1:], high[rows][:-1])
        assert np.all((low < plan.frequency) & (plan.frequency < high))


@pytest.mark.parametrize("shape", [(40, 30), (720, 320)])
def test_every_pixel_is_the_loudest_tile_that_covers_it(plan, rng, shape):
    spectrum = spectrum_of(rng.standard_normal(plan.samples))
    picture = drawn(plan, spectrum, n_times=shape[0], n_frequencies=shape[1])
    low, high = row_edges(plan)
    width = 24.0 / shape[0]
    largest = 0.0
    # the slow twin: pixel by pixel over all tiles, at pixels chosen at random
    tiles = []
    for row in range(len(plan.q)):
        x = row_coefficients(spectrum[None], plan, row)[0]
        energy = np.abs(x) ** 2
        time = np.arange(len(x)) * plan.length_s / len(x)
        inside = (time >= 4.0) & (time < 28.0)
        tiles.append((energy, time, inside))
        largest = max(largest, energy[inside].max())
    for i, j in zip(
        rng.integers(0, shape[1], 12), rng.integers(0, shape[0], 12), strict=True
    ):
        left = 4.0 + j * width
        f_low, f_high = picture.frequency[i], picture.frequency[i + 1]
        expected = np.nan
        for row, (energy, time, inside) in enumerate(tiles):
            if low[row] * (1 + 1e-8) >= f_high or high[row] * (1 - 1e-8) <= f_low:
                continue
            hit = inside & (time >= left) & (time < left + width)
            nearest = np.argmin(np.abs(time - left - width / 2))
            expected = np.nanmax([expected, energy[nearest], *energy[hit]])
        assert picture.energy[i, j] == pytest.approx(expected, rel=1e-4)
    assert np.nanmax(picture.energy) == pytest.approx(largest, rel=1e-4)


def test_a_planted_burst_is_the_brightest_pixel_at_its_place(plan, rng):
    t = np.arange(plan.samples) / RATE
    for t0, f0, rho in ((9.3, 25.0, 30.0), (17.0, 60.0, 50.0)):
        tau = 12 / (2 * np.pi * f0)
        h = np.cos(2 * np.pi * f0 * (t - t0)) * np.exp(-(((t - t0) / tau) ** 2))
        x = rng.standard_normal(len(t)) + rho * h / np.sqrt(np.sum(h**2))
        picture = drawn(plan, spectrum_of(x))
        i, j = np.unravel_index(np.nanargmax(picture.energy), picture.energy.shape)
        f = np.sqrt(picture.frequency[i] * picture.frequency[i + 1])
        assert f == pytest.approx(f0, rel=0.1)
        assert picture.time_s[j : j + 2].mean() == pytest.approx(t0, abs=0.05)
        z = picture.energy[i, j]
        # E Z = 1 + rho^2 / 2; the plan loses at most 20 %, noise moves it by rho (sd)
        assert 0.8 * (1 + rho**2 / 2) - 3 * rho < z < 1 + rho**2 / 2 + 3 * rho


def test_what_was_not_judged_stays_empty(plan, rng):
    spectrum = spectrum_of(rng.standard_normal(plan.samples))
    picture = empty_map(plan, start_s=0.0, end_s=32.0, n_times=64)
    add_tiles(
        picture,
        spectrum,
        plan,
        level=np.full(len(plan.q), 2.0),
        origin_s=0.0,
        low_s=8.0,
        high_s=24.0,
    )
    seen = np.isfinite(picture.energy).all(axis=0)
    assert seen.tolist() == [False] * 16 + [True] * 32 + [False] * 16
    twice = drawn(plan, spectrum, 8.0, 24.0, n_times=32).energy
    np.testing.assert_allclose(picture.energy[:, seen], twice / 2, rtol=1e-5)


def test_an_empty_range_is_refused(plan):
    with pytest.raises(PlanError, match="is empty"):
        empty_map(plan, start_s=3.0, end_s=3.0)
