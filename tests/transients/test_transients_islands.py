"""Bright tiles, islands and their scores, against slow twins and planted energy."""

import numpy as np
import pytest
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from dq.tiles import BrightRuns, plan_tiles, row_coefficients, scan_tiles
from dq.tiles.bright import find_bright
from dq.tiles.footprint import footprint_energy
from dq.tiles.kernels import CHUNK, chunk_maxima
from dq.transients import (
    Marks,
    Transforms,
    equivalent_energy,
    label_marks,
    label_transients,
    search_tiles,
    summarise,
)
from dq.transients.cluster import HALF_EXTENT, LINK
from dq.transients.islands import (
    COST,
    find_islands,
    needed_score,
    tile_area,
)

RATE, LENGTH_S = 1024, 32
SAMPLES = RATE * LENGTH_S


@pytest.fixture(scope="module")
def plan():
    return plan_tiles(RATE, SAMPLES, f_low=20.0)


def spectrum_of(x):
    """Give the spectrum of white samples, bins of mean square 1."""
    return (np.fft.rfft(x) / np.sqrt(SAMPLES)).astype(np.complex64)


def transforms_of(spectra, plan, **changes):
    one = np.ones((len(spectra), len(plan.q)))
    given = {
        "spectra": spectra,
        "level": one,
        "noise": 2.0 * one,
        "origin_s": np.arange(len(spectra)) * (LENGTH_S - 8.0),
        "low_s": np.full(len(spectra), 4.0),
        "high_s": np.full(len(spectra), LENGTH_S - 4.0),
    }
    return Transforms(**{**given, **changes})


def slow_bright(energy, low, high, bound, gap):
    """Give (first, last, peak, count) of runs with gaps, tile by tile."""
    runs = []
    for k in range(low, high):
        if energy[k] < bound:
            continue
        if runs and k - runs[-1][1] <= gap:
            runs[-1][1] = k
            runs[-1][3] += 1
            if energy[k] > energy[runs[-1][2]]:
                runs[-1][2] = k
        else:
            runs.append([k, k, k, 1])
    return runs


def test_bright_runs_equal_a_slow_scan(rng):
    n = 1003
    x = rng.standard_normal((2, n)) + 1j * rng.standard_normal((2, n))
    x = x.astype(np.complex64)
    maxima = np.empty((2, n // CHUNK + 1), np.float32)
    chunk_maxima(x.view(np.float32), maxima)
    energy = x.real**2 + x.imag**2
    padded = np.pad(energy, ((0, 0), (0, -n % CHUNK))).reshape(2, -1, CHUNK)
    np.testing.assert_allclose(maxima, padded.max(axis=2), rtol=1e-6)
    low, high = np.array([3, 500]), np.array([n, 985])
    bound = np.array([5, 3], np.float32)
    places, sums = np.empty((500, 5), np.int64), np.empty((500, 2), np.float32)
    found = find_bright(x.view(np.float32), maxima, low, high, bound, 4, places, sums)
    expected = []
    for item in range(2):
        runs = slow_bright(energy[item], low[item], high[item], bound[item], 4)
        expected += [(item, *run) for run in runs]
    assert found == len(expected) > 50
    np.testing.assert_array_equal(places[:found], expected)
    for (item, first, last, peak, _), total in zip(expected, sums, strict=False):
        part = energy[item, first : last + 1]
        assert total[0] == pytest.approx(part[part >= bound[item]].sum(), rel=1e-5)
        assert total[1] == pytest.approx(energy[item, peak])


def test_islands_equal_pairwise_linking(plan, rng):
    spectra = np.stack([spectrum_of(rng.standard_normal(SAMPLES)) for _ in range(2)])
    one = np.ones((2, len(plan.q)))
    _, lit = scan_tiles(
        spectra,
        plan,
        level=one,
        start_s=[4, 4],
        end_s=[28, 28],
        threshold=30.0,
        bright=3.5,
        gap_sigmas=2 * LINK * HALF_EXTENT,
    )
    origin = np.array([0.0, 24.0])
    island, score = find_islands(lit, plan, origin_s=origin)
    spacing = plan.length_s / plan.coarse[lit.row]
    start = origin[lit.item] + lit.first * spacing
    end = origin[lit.item] + lit.last * spacing
    half_t = LINK * HALF_EXTENT * plan.sigma_t[lit.row]
    half_f = LINK * HALF_EXTENT * plan.sigma_f[lit.row]
    f, plane = plan.frequency[lit.row], plan.plane[lit.row]
    near = np.maximum(start[:, None], start) - np.minimum(end[:, None], end)
    near = near <= half_t[:, None] + half_t
    near &= np.abs(f[:, None] - f) < half_f[:, None] + half_f
    near &= plane[:, None] == plane
    count, expected = connected_components(coo_array(near), directed=False)
    assert 50 < count < len(lit) / 2
    pairs = set(zip(island.tolist(), expected.tolist(), strict=True))
    assert len(pairs) == count == len(np.unique(island))
    k = len(lit) // 2
    area = tile_area(plan)[lit.row[k]]
    assert score[k] == pytest.approx(area * (lit.total[k] - COST * lit.count[k]))


def test_tiles_of_a_plane_share_out_the_energy(plan, rng):
    """Sum of area times energy over a plane is its band's part of all energy."""
    spectrum = spectrum_of(rng.standard_normal(SAMPLES))[None]
    area = tile_area(plan)
    for plane in np.unique(plan.plane):
        rows = np.flatnonzero(plan.plane == plane)
        total = 0.0
        for row in rows:
            x = row_coefficients(spectrum, plan, row)[0][::2]
            total += area[row] * np.sum(np.abs(x) ** 2)
        f = plan.frequency[rows]
        ratio = f[1] / f[0]
        band = f[-1] * ratio**0.5 - f[0] / ratio**0.5
        assert total == pytest.approx(band * LENGTH_S, rel=0.03)


def burst(f, q, t0, rho):
    """Give a sine-Gaussian of optimal SNR ``rho`` in white noise of variance 1."""
    t = np.arange(SAMPLES) / RATE - t0
    tau = q / (2 * np.pi * f)
    wave = np.exp(-((t / tau) ** 2)) * np.cos(2 * np.pi * f * t + 0.4)
    return rho * wave / np.sqrt(np.sum(wave**2))


def sweep(rate, t0, rho, seconds=0.5):
    """Give a linear sweep around 250 Hz of optimal SNR ``rho``."""
    t = np.arange(SAMPLES) / RATE - t0
    wave = np.cos(2 * np.pi * (250 * t + 0.5 * rate * t**2))
    wave *= np.cos(np.pi * np.clip(t / seconds, -0.5, 0.5)) ** 0.5
    return rho * wave / np.sqrt(np.sum(wave**2))


@pytest.mark.parametrize(("f", "q"), [(60, 6), (150, 20), (300, 50)])
def test_the_footprint_of_a_burst_holds_its_energy(plan, f, q):
    spectrum = spectrum_of(burst(f, q, 15.3, 30.0))
    marks = search_tiles(
        transforms_of(spectrum[None], plan),
        plan,
        threshold=16.0,
        q_range=(4.0, 64.0),
    )
    found = summarise(marks, label_transients(marks, label_marks(marks)))
    assert len(found["time"]) == 1
    # the data hold no noise, whose mean energy is taken off: one for each unit of area
    low, high = found["low"][0] - 1.5 * f / q, found["high"][0] + 1.5 * f / q
    seconds = found["end"][0] - found["start"][0] + 3 * q / (4 * np.pi * f)
    most = 2 * (high - low) * seconds
    assert 0.98 * 30**2 - most < 2 * found["summed"][0] < 1.02 * 30**2


def test_a_footprint_in_noise_is_unbiased_and_grows_with_its_area(plan, rng):
    row = np.flatnonzero(plan.plane == 1)[20:26]
    values = [
        footprint_energy(
            spectrum_of(rng.standard_normal(SAMPLES)),
            plan,
            row=row,
            start_s=np.full(6, 12.0),
            end_s=np.full(6, 13.5),
            level=np.ones(len(plan.q)),
            within_s=(4.0, 28.0),
        )
        for _ in range(120)
    ]
    sigma_f, sigma_t = plan.sigma_f[row], plan.sigma_t[row]
    band = plan.frequency[row[-1]] - plan.frequency[row[0]]
    cells = (band + 6 * sigma_f.mean()) * (1.5 + 3 * sigma_t.mean())
    # the energy of n independent tiles has variance n
    assert abs(np.mean(values)) < 4 * np.sqrt(cells / len(values))
    assert 0.6 < np.var(values) / cells < 1.5


def test_a_sweep_without_a_loud_tile_is_a_transient(plan, rng):
    threshold = 1 + 5.5**2 / 2
    summed, loud, by_cluster = [], [], []
    for _ in range(12):
        x = rng.standard_normal(SAMPLES) + sweep(800.0, 16.0, 12.0)
        marks = search_tiles(
            transforms_of(spectrum_of(x)[None], plan),
            plan,
            threshold=threshold,
            q_range=(4.0, 64.0),
        )
        found = summarise(marks, label_transients(marks, label_marks(marks)))
        here = (found["start"] < 16.3) & (found["end"] > 15.7)
        passed = equivalent_energy(found["score"][here]) >= threshold
        loud.append(found["loud"][here].any())
        by_cluster.append(passed.any())
        if passed.any():
            best = np.argmax(found["score"][here])
            summed.append(np.sqrt(2 * found["summed"][here][best]))
    assert sum(by_cluster) >= 11 > 6 >= sum(loud)
    assert np.median(summed) == pytest.approx(12.0, rel=0.1)


def test_rarity_of_a_score_is_inverted():
    for energy in (12.0, 16.125, 40.0):
        assert equivalent_energy(needed_score(energy)) == pytest.approx(energy)


def some_marks(rows):
    """Build marks from (start, end, low, high, energy, loud, plane)."""
    a = np.array(rows, float).reshape(-1, 7)
    start, end, low, high, energy, loud, plane = a.T
    n = len(a)
    return Marks(
        start=start,
        end=end,
        low=low,
        high=high,
        time=(start + end) / 2,
        frequency=np.sqrt(low * high),
        q=np.full(n, 8.0),
        energy=energy,
        noise=np.full(n, 2.0),
        count=np.arange(1, n + 1),
        plane=plane.astype(int),
        loud=loud > 0,
        score=np.where(loud > 0, 0.0, energy),
        summed=np.zeros(n),
        reach_s=np.zeros(n),
        reach_hz=np.zeros(n),
    )


def test_bright_tiles_do_not_join_loud_ones():
    marks = some_marks(
        [
            (0.0, 1.0, 10, 20, 18, 1, 0),
            (0.8, 3.2, 10, 20, 9, 0, 0),
            (3.0, 4.0, 10, 20, 25, 1, 0),
            (3.1, 3.9, 10, 20, 8, 0, 1),
            (8.0, 9.0, 10, 20, 9, 0, 1),
            (8.5, 9.5, 10, 20, 7, 0, 1),
            (8.0, 9.5, 10, 20, 6, 0, 2),
        ]
    )
    groups = label_marks(marks)
    assert len(set(groups)) == 2
    labels = label_transients(marks, groups)
    assert len(set(labels)) == 3
    assert labels[1] == labels[2] == labels[3] != labels[0]
    found = summarise(marks, labels)
    np.testing.assert_array_equal(found["loud"], [True, True, False])
    # extents and counts of the loud tiles; of the best plane where there are none
    np.testing.assert_array_equal(found["start"], [0.0, 3.0, 8.0])
    np.testing.assert_array_equal(found["end"], [1.0, 4.0, 9.5])
    np.testing.assert_array_equal(found["count"], [1, 3, 11])
    # planes see the same energy: the best counts, not the sum
    np.testing.assert_array_equal(found["score"], [0.0, 9.0, 16.0])


def test_no_bright_runs_make_no_islands(plan):
    island, score = find_islands(BrightRuns.none(), plan, origin_s=np.zeros(1))
    assert len(island) == len(score) == 0
