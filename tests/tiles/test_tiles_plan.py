"""The tile plan against the published formulas and the worked case."""

import math

import numpy as np
import pytest

from dq.errors import PlanError
from dq.tiles import band_weights, plan_tiles
from dq.tiles.plan import (
    Q_MIN,
    bisquare,
    highest_frequency,
    mismatch_metric,
    plane_qs,
    row_frequencies,
    tile_step,
    tiles_in_row,
)

# Worked case: Q 4..64, 10 Hz to each plane's limit, 4096 Hz, 64 s; formulas of
# Chatterji et al. 2004, Class. Quantum Grav. 21 S1809 (from memory, recomputed).
WORKED = {
    0.2: ([28, 56, 114, 231], [1014600, 1197222, 1343836, 1436862]),
    0.3: ([23, 46, 93, 188], [680076, 802841, 895084, 954804]),
}


@pytest.mark.reference
@pytest.mark.parametrize("mismatch", WORKED)
def test_planned_counts_equal_the_worked_case(mismatch):
    rows, tiles = WORKED[mismatch]
    planes = plane_qs(4, 64, mismatch)
    np.testing.assert_allclose(planes, [5.6569, 11.3137, 22.6274, 45.2548], atol=5e-5)
    for q, n_rows, n_tiles in zip(planes, rows, tiles, strict=True):
        f = row_frequencies(q, 10, highest_frequency(q, 4096), mismatch)
        assert len(f) == n_rows
        assert sum(tiles_in_row(q, x, 64, mismatch) for x in f) == n_tiles


@pytest.mark.reference
def test_fine_mismatch_needs_eight_planes():
    planes = plane_qs(4, 64, 0.05)
    counts = [
        len(row_frequencies(q, 10, highest_frequency(q, 4096), 0.05)) for q in planes
    ]
    np.testing.assert_allclose(planes[[0, -1]], [4.7568, 53.8174], atol=5e-5)
    assert counts == [47, 66, 94, 134, 191, 272, 387, 549]
    assert len(plane_qs(Q_MIN, 100, 0.2)) == 5


@pytest.mark.reference
def test_first_and_last_row_and_limits():
    rows = row_frequencies(5.656854, 10, highest_frequency(5.656854, 4096), 0.2)
    np.testing.assert_allclose(rows[[0, -1]], [10.9068, 1183.719], rtol=1e-5)
    limits = [highest_frequency(q, 4096) for q in (4, 8, 16, 64)]
    np.testing.assert_allclose(
        limits, [1119.642, 1447.781, 1696.363, 1947.097], atol=1e-3
    )


def _atom_overlap_loss(f, q, dt, df, dq):
    """Integrate the energy overlap of two unit Gaussian atoms numerically."""
    t = np.linspace(-3, 3, 600_001)

    def atom(t, f, q):
        norm = (8 * np.pi * f**2 / q**2) ** 0.25
        return norm * np.exp(-4 * (np.pi * f * t / q) ** 2 + 2j * np.pi * f * t)

    product = atom(t, f, q) * np.conj(atom(t - dt, f + df, q + dq))
    return 1 - abs(np.trapezoid(product, t)) ** 2


@pytest.mark.parametrize(
    ("dt", "df", "dq", "metric", "direct"),
    [
        (2e-4, 0, 0, 1.5791e-4, 1.579e-4),
        (0, 0.5, 0, 6.375e-4, 6.341e-4),
        (0, 0, 0.2, 2.000e-4, 1.960e-4),
        (0, 0.5, 0.2, 7.375e-4, 7.437e-4),
        (2e-4, 0.5, -0.2, 1.0954e-3, 1.0878e-3),
    ],
)
def test_metric_is_the_overlap_loss_of_near_atoms(dt, df, dq, metric, direct):
    # offsets of 0.5 Hz and Q 0.2: with equal signs the cross term lowers the loss
    got = mismatch_metric(100.0, 10.0, dt, df, dq)
    loss = _atom_overlap_loss(100.0, 10.0, dt, df, dq)
    assert got == pytest.approx(metric, rel=1e-3)
    assert loss == pytest.approx(direct, rel=2e-3)


def test_any_signal_inside_the_plan_lies_within_the_mismatch_of_a_tile(rng):
    mismatch = 0.2
    plan = plan_tiles(1024.0, 64 * 1024, f_low=16, mismatch=mismatch)
    worst = 0.0
    for _ in range(2000):
        q = 4 * 16 ** rng.random()
        f = 20 * 10 ** rng.random()
        dt = 0.5 * plan.length_s / plan.tiles * rng.uniform(-1, 1, len(plan.q))
        # the exact overlap of Gaussian atoms, valid at any offset
        q0, f0 = plan.q, plan.frequency
        a, b = (f / q) ** 2, (f0 / q0) ** 2
        peak = 2 * np.sqrt(a * b) / (a + b)
        cross = 8 * np.pi**2 * a * b / (a + b) * dt**2
        shift = (f - f0) ** 2 / (2 * (a + b))
        overlap = peak * np.exp(-cross - shift)
        worst = max(worst, 1 - overlap.max())
    assert worst < mismatch
    assert worst > mismatch / 4  # the plan is not finer than was asked for


def test_window_has_unit_energy_and_sigma_f():
    x = np.linspace(-1, 1, 200_001)
    energy = bisquare(x) ** 2
    step = x[1] - x[0]
    assert energy.sum() * step == pytest.approx(256 / 315, rel=1e-6)
    assert (energy * x**2).sum() / energy.sum() == pytest.approx(1 / 11, rel=1e-6)
    plan = plan_tiles(1024.0, 64 * 1024, f_low=10)
    for window in map(plan.window, range(len(plan.q))):
        assert np.sum(window.astype(float) ** 2) == pytest.approx(1, rel=1e-5)


def test_bisquare_overlaps_the_gaussian_of_same_width():
    # 0.99505 of the energy (closed form checked by quadrature)
    x = np.linspace(-6, 6, 400_001)
    gauss = np.exp(-(x**2) / 4)
    window = bisquare(x / math.sqrt(11))
    product = np.sum(gauss * window) ** 2 / (np.sum(gauss**2) * np.sum(window**2))
    assert product == pytest.approx(0.99505, abs=2e-5)


@pytest.mark.parametrize("rate", [16.0, 32.0, 50.0, 100.0, 1024.0, 16384.0, 65536.0])
def test_plans_at_any_rate_stay_inside_the_band(rate):
    plan = plan_tiles(rate, int(72 * rate), f_low=min(max(rate / 50, 1), 10))
    top = plan.frequency * (1 + Q_MIN / plan.q)
    assert np.all(top <= rate / 2 * (1 + 1e-9))
    assert np.all(plan.tiles >= plan.width)


def test_rows_that_settle_too_slowly_are_left_out():
    plan = plan_tiles(100.0, 8000, f_low=1, max_settling_s=6.0)
    assert plan.settling_s <= 6.0
    assert plan.frequency[plan.q == plan.q.max()].min() > 1.5


def test_no_room_between_the_edges_is_refused():
    with pytest.raises(PlanError, match="20 Hz"):
        plan_tiles(32.0, 2304, f_low=20)


def test_step_of_mismatch():
    assert tile_step(0.2) == pytest.approx(0.516398, abs=5e-7)
    assert tile_step(0.05) == pytest.approx(0.258199, abs=5e-7)


def test_band_weights_average_a_density():
    plan = plan_tiles(1024.0, 72 * 1024, f_low=10)
    frequency = np.arange(2049) / 4
    weights = band_weights(plan, frequency)
    np.testing.assert_allclose(weights @ np.ones(2049), 1.0)
    # a density proportional to f averages to the row's own frequency (symmetry)
    np.testing.assert_allclose(weights @ frequency, plan.frequency, rtol=2e-2)
