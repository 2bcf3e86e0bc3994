"""Tile energies: noise law, planted signals, slow twin, and an outside transform."""

import numpy as np
import pytest
import scipy.stats

from dq.tiles import plan_tiles, row_coefficients, tile_runs
from dq.tiles.kernels import CHUNK, chunk_maxima, find_runs, single_tile
from dq.tiles.midpoints import midpoint_error, midpoint_weights

RATE = 1024.0
LENGTH = 32
SAMPLES = int(RATE * LENGTH)


@pytest.fixture(scope="module")
def plan():
    return plan_tiles(RATE, SAMPLES, f_low=16)


def white_spectra(rng, items=1):
    """Make spectra of white noise: bins of mean square 1."""
    x = rng.standard_normal((items, SAMPLES))
    return (np.fft.rfft(x, axis=1) / np.sqrt(SAMPLES)).astype(np.complex64)


def spectrum_of(x):
    """Scale a series in unit white noise: one-sided density 2 / RATE."""
    return (np.fft.rfft(x) / np.sqrt(SAMPLES)).astype(np.complex64)[None]


def sine_gaussian(t0, f0, q_burst, rho, phase=0.3):
    """Make a sine-Gaussian of optimal SNR rho in white noise of variance 1."""
    t = np.arange(SAMPLES) / RATE - t0
    tau = q_burst / (np.sqrt(2) * np.pi * f0)
    h = np.sin(2 * np.pi * f0 * t + phase) * np.exp(-((t / tau) ** 2))
    return h * rho / np.sqrt(np.sum(h**2))


def test_white_noise_energies_follow_the_exponential_law(plan, rng):
    """Tiles ten sigma_t apart are independent; their law is exp(-Z)."""
    spectra = white_spectra(rng, 8)
    drawn = []
    for row in range(0, len(plan.q), 5):
        energy = np.abs(row_coefficients(spectra, plan, row)) ** 2
        apart = int(np.ceil(10 * plan.sigma_t[row] / LENGTH * plan.tiles[row]))
        drawn.append(energy[:, :: max(apart, 1)].ravel())
        assert energy.mean() == pytest.approx(1, abs=8 / np.sqrt(drawn[-1].size))
    values = np.concatenate([d[:200] for d in drawn])
    assert scipy.stats.kstest(values, "expon").pvalue > 1e-3
    # the test can fail: a 10 % error of the scale is noticed
    assert scipy.stats.kstest(values * 1.1, "expon").pvalue < 1e-3


def test_row_equals_the_direct_sum(plan, rng):
    """The slow twin: each coefficient as a sum over the window's bins in float64."""
    spectra = white_spectra(rng)
    for row in (0, len(plan.q) // 2, len(plan.q) - 1):
        x = row_coefficients(spectra, plan, row)[0]
        for tile in (0, 7, len(x) // 2, len(x) - 1):
            time = tile * LENGTH / len(x)
            slow = single_tile(
                spectra[0], SAMPLES, RATE, time, plan.frequency[row], plan.q[row]
            )
            assert abs(x[tile]) == pytest.approx(abs(slow), rel=1e-4, abs=1e-5)


def test_coefficient_equals_a_time_domain_integral(plan):
    """A tile is the overlap of the data with the window's transform in time."""
    x = sine_gaussian(16.0, 120.0, 8.0, 20.0)
    f0, q = 120.0, 11.3137
    half = np.sqrt(11) * f0 / q
    t = np.arange(SAMPLES) / RATE
    phi = np.linspace(-half, half, 4001)
    window = (1 - (phi / half) ** 2) ** 2
    window *= np.sqrt(315 / 256 / half)  # unit energy: integral of w^2 is 1
    near = np.abs(t - 16.0) < 1.5
    kernel = np.trapezoid(
        window * np.exp(2j * np.pi * phi * (t[near, None] - 16.0)), phi, axis=1
    )
    kernel *= np.exp(2j * np.pi * f0 * (t[near] - 16.0))
    direct = np.sum(x[near] * np.conj(kernel)) / np.sqrt(RATE)
    tile = single_tile(spectrum_of(x)[0], SAMPLES, RATE, 16.0, f0, q)
    assert abs(tile) == pytest.approx(abs(direct), rel=2e-3)


@pytest.mark.parametrize(
    ("q_burst", "q_tile"), [(9.0, 12.7279), (3.0, 4.24264), (20.0, 28.2843)]
)
def test_best_tile_q_is_root_two_of_the_burst_q(q_burst, q_tile):
    """Burst papers define Q by tau = Q / (sqrt(2) pi f); tiles by f / sigma_f."""
    spectrum = spectrum_of(sine_gaussian(16.0, 200.0, q_burst, 30.0))[0]
    grid = q_tile * np.linspace(0.6, 1.6, 101)
    energy = [
        abs(single_tile(spectrum, SAMPLES, RATE, 16.0, 200.0, q)) ** 2 for q in grid
    ]
    # the bisquare is not the Gaussian: its best Q lies within 5 % of the formula
    assert grid[np.argmax(energy)] == pytest.approx(q_tile, rel=0.05)
    # a matched tile holds rho^2 / 2, less the half percent of the window's shape
    assert max(energy) == pytest.approx(30.0**2 / 2, rel=0.012)


def loudest(plan, x):
    runs = tile_runs(
        spectrum_of(x),
        plan,
        level=np.ones((1, len(plan.q))),
        start_s=np.array([2.0]),
        end_s=np.array([30.0]),
        threshold=8.0,
    )
    return runs, int(np.argmax(runs.energy))


def test_planted_burst_comes_back_at_its_place(plan, rng):
    for _ in range(20):
        f0, t0 = 30 * 8 ** rng.random(), 10 + 10 * rng.random()
        q = 4 + 26 * rng.random()
        x = sine_gaussian(t0, f0, q, 25.0, phase=6 * rng.random())
        runs, best = loudest(plan, x)
        row = runs.row[best]
        time = runs.peak[best] * LENGTH / plan.tiles[row]
        spacing = LENGTH / plan.tiles[row]
        assert abs(time - t0) < 0.75 * spacing
        assert abs(plan.frequency[row] - f0) < 1.2 * plan.sigma_f[row]
        # at worst the mismatch and the window's shape are lost
        assert runs.energy[best] > 0.8 * 0.98 * 25.0**2 / 2
        assert runs.energy[best] <= 25.0**2 / 2 * 1.001


def slow_runs(energy, low, high, bound):
    """Scan one row of fine energies with plain array operations."""
    above = np.zeros(len(energy), bool)
    above[low:high] = energy[low:high] >= bound
    edges = np.flatnonzero(np.diff(above, prepend=False, append=False))
    pairs = zip(edges[::2], edges[1::2] - 1, strict=True)
    return [(int(a), int(b), int(a + np.argmax(energy[a : b + 1]))) for a, b in pairs]


def test_runs_equal_a_slow_scan(rng):
    """find_runs against a plain scan, with runs over chunk borders and both ends."""
    x = rng.standard_normal((3, 1500)) + 1j * rng.standard_normal((3, 1500))
    x = x.astype(np.complex64)
    x[1, 125:135] = 9
    x[2, 250:262] = 9
    low, high = np.array([0, 5, 511]), np.array([3000, 2990, 520])
    bound = np.array([4, 3, 5], dtype=np.float32)
    weights = midpoint_weights()
    places, energies = np.empty((5000, 4), int), np.empty((5000, 4), np.float32)
    none = np.zeros(3, dtype=np.float32)
    maxima = np.empty((3, 1500 // CHUNK + 1), np.float32)
    chunk_maxima(x.view(np.float32), maxima)
    found = find_runs(
        x.view(np.float32), maxima, low, high, bound, none, weights, places, energies
    )
    expected, fine = [], []
    for item in range(3):
        around = np.arange(-len(weights) // 2 + 1, len(weights) // 2 + 1)
        index = (np.arange(1500)[:, None] + around) % 1500
        between = x[item][index].astype(complex) @ weights.astype(float)
        both = np.stack([x[item], between], axis=1).ravel()
        fine.append(np.abs(both) ** 2)
        runs = slow_runs(fine[-1], low[item], high[item], bound[item])
        expected += [(item, *run) for run in runs]
    assert found == len(expected) > 100
    np.testing.assert_array_equal(places[:found], expected)
    item, peak = places[:found, 0], places[:found, 3]
    fine = np.array(fine)
    for offset, column in ((0, 0), (-1, 1), (1, 2)):
        want = fine[item, (peak + offset) % 3000]
        np.testing.assert_allclose(energies[:found, column], want, rtol=1e-3, atol=1e-4)


def test_midpoints_are_the_tiles_of_the_whole_row(plan, rng):
    assert midpoint_error() < 8e-4
    spectra = white_spectra(rng)
    for row in range(0, len(plan.q), 7):
        whole = row_coefficients(spectra, plan, row)[0]
        coarse, between = whole[::2], whole[1::2]
        width = len(plan.window(row))
        if width < 40:
            continue
        weights = midpoint_weights()
        around = np.arange(-len(weights) // 2 + 1, len(weights) // 2 + 1)
        index = (np.arange(len(coarse))[:, None] + around) % len(coarse)
        error = np.abs(coarse[index] @ weights - between)
        assert np.sqrt(np.mean(error**2)) < 3e-3


@pytest.mark.parametrize("threshold", [8.0, 16.125])
def test_screened_search_equals_the_full_plan(plan, threshold):
    """Coarse tiles and a close look find what the transform of all tiles finds."""
    options = {"start_s": [2.0] * 8, "end_s": [30.0] * 8, "threshold": threshold}
    level = np.ones((8, len(plan.q)))
    found, missed, extra = 0, [], []
    for night in range(6):
        rng = np.random.default_rng(night)
        x = rng.standard_normal((8, SAMPLES))
        for item in range(8):
            t0, f0 = rng.uniform(4, 28), 30 * 8 ** rng.random()
            x[item] += sine_gaussian(t0, f0, rng.uniform(4, 30), rng.uniform(5, 12))
        spectra = (np.fft.rfft(x, axis=1) / np.sqrt(SAMPLES)).astype(np.complex64)
        runs = tile_runs(spectra, plan, level=level, **options)
        got = {}
        for k in range(len(runs)):
            key = (runs.item[k], runs.row[k])
            got.setdefault(key, []).append((runs.peak[k], runs.energy[k]))
        for row in range(len(plan.q)):
            energy = np.abs(row_coefficients(spectra, plan, row)) ** 2
            low, high = (int(np.ceil(t / LENGTH * plan.tiles[row])) for t in (2, 30))
            for item in range(8):
                want = slow_runs(energy[item], low, high, threshold)
                mine = dict(got.pop((item, row), []))
                for _, _, peak in want:
                    # two tiles of equal energy may change places
                    near = [p for p in (peak, peak - 1, peak + 1) if p in mine]
                    if near:
                        found += 1
                        loud = energy[item, peak]
                        assert mine.pop(near[0]) == pytest.approx(loud, rel=0.02)
                    else:
                        missed.append(energy[item, peak])
                extra += list(mine.values())
        assert not got or max(e for v in got.values() for _, e in v) < threshold * 1.02
    assert found > (3000 if threshold < 10 else 300)
    # only runs that graze the threshold may differ, by the error of a mid-point
    assert max([*missed, *extra], default=0.0) < threshold * 1.02
    assert len(missed) + len(extra) < 0.02 * found


def test_more_runs_than_first_guessed_are_all_kept(plan, rng):
    spectra = white_spectra(rng, 2)
    options = {"level": np.ones((2, len(plan.q))), "threshold": 1.0}
    runs = tile_runs(spectra, plan, start_s=[0, 0], end_s=[32, 32], **options)
    total = np.sum(runs.last - runs.first + 1)
    assert total / (2 * plan.tiles.sum()) == pytest.approx(np.exp(-1), rel=0.03)


@pytest.mark.reference
def test_ridge_agrees_with_a_morlet_transform(plan):
    """Frequency of the energy ridge of a tone and of a sweep, against PyWavelets."""
    pywt = pytest.importorskip("pywt")
    t = np.arange(SAMPLES) / RATE
    middle = slice(int(8 * RATE), int(24 * RATE), 512)
    rows = np.flatnonzero(plan.plane == 1)
    scales = pywt.frequency2scale("cmor3.0-1.0", plan.frequency[rows] / RATE)
    for rate_hz_s in (0.0, 4.0):
        x = np.sin(2 * np.pi * (60 * t + rate_hz_s / 2 * t**2))
        theirs, _ = pywt.cwt(x, scales, "cmor3.0-1.0")
        ridge = plan.frequency[rows][np.argmax(np.abs(theirs[:, middle]), axis=0)]
        ours = []
        for row in rows:
            energy = np.abs(row_coefficients(spectrum_of(x), plan, row)[0])
            at = np.arange(SAMPLES)[middle] / SAMPLES * len(energy)
            ours.append(energy[np.round(at).astype(int) % len(energy)])
        mine = plan.frequency[rows][np.argmax(ours, axis=0)]
        truth = 60 + rate_hz_s * t[middle]
        step = plan.frequency[rows][1] / plan.frequency[rows][0]
        # two rulers of one row step each: neither may be off by more than one row
        assert np.all(np.abs(np.log(mine / truth)) < np.log(step))
        assert np.all(np.abs(np.log(mine / ridge)) < 1.01 * np.log(step))
