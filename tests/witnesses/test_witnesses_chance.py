"""Bursts, rhythms and swells: chance stays at the stated rate, couplings are found."""

import numpy as np
import pandas as pd
import pytest
import scipy.stats

from dq.config import Witnesses
from dq.counting import poisson_significance
from dq.segments import NS, Segments
from dq.witnesses import find_witnesses
from dq.witnesses.chance import (
    calibrated_significance,
    cluster_starts,
    clusters_expected,
    dispersion,
    inner_spacings,
    own_measure,
    shifted_counts,
)
from dq.witnesses.windows import hits


def union_of_windows(times, half):
    """Give the union of windows around sorted times."""
    union = Segments.from_arrays(times - half, times + half)
    return union.starts, union.ends


GPS = 1_420_000_000
HOUR = 3600
WHOLE = Segments.from_seconds([GPS], [GPS + HOUR])


def table(rng, times):
    """Make transients with the steep law of SNR that detectors show."""
    times = np.sort(np.asarray(times, float))
    snr = 5.5 * (1 + rng.pareto(2.0, len(times)))
    at = GPS + times
    columns = dict.fromkeys(("gps_time", "gps_start", "gps_end"), at)
    return pd.DataFrame(columns | {"snr": snr})


def draw(rng, kind, n):
    """Draw at least n times: alone, in bursts of varied size, or in one long swell."""
    if kind == "uniform":
        return rng.uniform(0, HOUR, n)
    groups, count = [], 0
    while count < n:
        size, width = {
            "geometric": lambda: (rng.geometric(1 / 8), rng.uniform(0.2, 4)),
            "heavy": lambda: (
                min(int(1 + 3 * rng.pareto(1.1)), 300),
                10 * rng.random(),
            ),
            "swell": lambda: (n // 2, 400.0),
        }[kind]()
        groups.append((rng.uniform(0, HOUR) + rng.uniform(0, width, size)) % HOUR)
        count += size
    return np.concatenate(groups)


def uncoupled_night(seed, kind, channels, strain=300, auxiliary=500):
    rng = np.random.default_rng(seed)
    main = table(rng, draw(rng, kind, strain))
    others = {
        f"OV-{k:03d}": table(rng, draw(rng, kind, auxiliary)) for k in range(channels)
    }
    for k in range(2):
        period = rng.uniform(5, 60)
        clock = rng.uniform(0, period) + np.arange(0, HOUR - 60, period)
        others[f"OV-CLOCK-{k}"] = table(rng, clock)
    return main, others


def find(main, others, **settings):
    return find_witnesses(
        main,
        others,
        analysed=WHOLE,
        auxiliary_analysed=dict.fromkeys(others, WHOLE),
        safety={},
        settings=Witnesses(**settings),
    )


@pytest.mark.slow
@pytest.mark.parametrize("kind", ["uniform", "geometric", "heavy", "swell"])
def test_pure_chance_accepts_at_the_stated_rate(kind):
    """200 nights without coupling, one family of law each, default ladders."""
    nights, accepted = 200, 0
    for seed in range(nights):
        main, others = uncoupled_night(seed, kind, channels=10)
        accepted += int(find(main, others).accepted.any())
    assert accepted <= scipy.stats.binom.ppf(0.99, nights, 0.01)


@pytest.mark.slow
def test_many_bursty_channels_keep_the_stated_rate():
    """The far tail of heavy bursts, where counts of transients go wrong."""
    nights, accepted = 15, 0
    for seed in range(nights):
        main, others = uncoupled_night(seed, "heavy", channels=300)
        accepted += int(find(main, others).accepted.any())
    assert accepted <= scipy.stats.binom.ppf(0.99, nights, 0.01)


def test_the_plain_poisson_law_would_fail_the_same_nights():
    false = 0
    for seed in range(20):
        main, others = uncoupled_night(seed, "heavy", channels=10)
        out = find(main, others)
        false += np.any(out.trials * 10.0**-out.significance <= 0.01)
    assert false >= 5


@pytest.mark.parametrize("kind", ["uniform", "geometric", "heavy"])
def test_a_planted_coupling_is_found_among_bursts(kind):
    for seed in range(5):
        main, others = uncoupled_night(seed, kind, channels=8)
        rng = np.random.default_rng(seed)
        causes = rng.uniform(0, HOUR, 30)
        heard = np.append(causes, draw(rng, kind, 200))
        seen = np.append(causes + 0.02, main.gps_time.to_numpy() - GPS)
        others["OV-CAUSE"] = table(rng, heard).assign(snr=20.0)
        out = find(table(rng, seen), others)
        assert out[out.accepted].channel.tolist() == ["OV-CAUSE"]


def test_bursts_join_and_single_transients_stay_apart(rng):
    total = HOUR * NS
    single = np.sort(rng.integers(0, total, 500))
    assert len(cluster_starts(single, total)) == pytest.approx(450, rel=0.05)
    start = np.arange(50) * 60 * NS
    bursts = np.sort((start[:, None] + rng.integers(0, NS, (50, 20))).ravel())
    first = cluster_starts(bursts, total)
    assert first.tolist() == list(range(0, 1000, 20))
    assert len(inner_spacings(bursts, first)) == 950
    assert len(cluster_starts(single[:0], total)) == 0
    assert cluster_starts(single[:1], total).tolist() == [0]


def slow_chance(members, starts, ends, total):
    """Give the share of all integer shifts at which a cluster meets the windows."""
    covered = np.zeros(total, dtype=bool)
    for a, b in zip(starts, ends, strict=True):
        covered[a:b] = True
    met = np.zeros(total, dtype=bool)
    for m in members:
        met |= np.roll(covered, -int(m))
    return met.mean()


def test_expected_clusters_bound_the_exact_chance(rng):
    total = 5000
    for _ in range(60):
        starts, ends = union_of_windows(np.sort(rng.integers(50, 4950, 25)), 15)
        members = np.sort(rng.integers(0, 200, rng.integers(1, 6)))
        exact = slow_chance(members, starts, ends, total)
        spacings = np.diff(members)
        bound = clusters_expected(1, spacings, starts, ends, total)
        assert bound >= exact - 1e-12
        if len(members) == 1:
            assert bound == pytest.approx(exact)  # chance efficiency = dead time
        assert bound <= exact * len(members) + 1e-12


def test_shifted_counts_equal_the_slow_twin(rng):
    total = HOUR * NS
    positions = np.sort(rng.integers(0, total, 40))
    first = cluster_starts(positions, total)
    starts, ends = union_of_windows(np.sort(rng.integers(NS, total - NS, 60)), NS)
    fast = shifted_counts(positions, first, starts, ends, total)
    shifts = (np.arange(1, 401) * 0.6180339887498949 % 1.0 * total).astype(np.int64)
    shifts = [s for s in shifts if 10 * NS <= s <= total - 10 * NS]
    slow = []
    for shift in shifts:
        met = set()
        for cluster, group in enumerate(np.split(positions, first[1:])):
            if np.any(hits((group + shift) % total, starts, ends) >= 0):
                met.add(cluster)
        slow.append(len(met))
    assert fast.tolist() == slow


def test_a_shared_rhythm_is_no_evidence_by_itself(rng):
    """Two clocks of one period: many shifts coincide as well as no shift does."""
    clock = np.arange(5, HOUR, 20.0)
    out = find(table(rng, clock + 0.1), {"OV-CLOCK": table(rng, clock)})
    assert out.significance.iloc[0] > 50
    assert not out.accepted.iloc[0]


def test_the_decision_is_never_bolder_than_the_clusters():
    for seed in range(5):
        out = find(*uncoupled_night(seed, "heavy", channels=10))
        out = out[out.clusters.notna()]
        clusters = poisson_significance(
            out.clusters.to_numpy(float), out.clusters_expected.to_numpy(float)
        )
        calibrated = out.calibrated_significance.to_numpy()
        assert np.all(calibrated <= clusters + 1e-12)
        assert np.all(calibrated <= out.significance.to_numpy() + 1e-12)


def test_usual_slides_leave_scores_as_they_are(rng):
    scores = rng.exponential(1 / np.log(10), (4, 101, 3))
    scores[1, 0, 2] = 40.0
    measured, divisor = own_measure(scores, np.full(4, 50))
    # 101 times 50 tests reach log10(5050) + 1 = 4.7 by chance at most
    assert scores[:, 1:].max() < 4.7
    assert (divisor == 1.0).all()
    # only the slides of a channel that is coupled shrink, which raises no bar
    assert measured[1, 0, 2] == 40.0
    np.testing.assert_allclose(
        measured[1, 1:, 2], scores[1, 1:, 2] * (np.log10(5050) + 1) / 40.0
    )
    measured[1, 1:, 2] = scores[1, 1:, 2]
    np.testing.assert_array_equal(measured, scores)


def test_a_channel_that_scores_high_in_slides_is_measured_by_them():
    scores = np.ones((1, 101, 1))
    scores[0, [0, 7, 30], 0] = (400.0, 500.0, 300.0)
    measured, divisor = own_measure(scores, np.array([99]))
    usual = np.log10(99 * 101) + 1
    assert divisor[0, 0] == pytest.approx(500 / usual)
    # each by the highest of the others
    assert measured[0, 0, 0] == pytest.approx(400 / 500 * usual)
    assert measured[0, 7, 0] == pytest.approx(500 / 400 * usual)
    assert measured[0, 30, 0] == pytest.approx(300 / 500 * usual)


def test_slides_and_no_slide_are_measured_alike(rng):
    """Exchange them, and the measured scores are exchanged: the chance stays exact."""
    scores = rng.pareto(0.7, (3, 21, 2))
    scores[2, 5] = scores[2, 9]
    turn = rng.permutation(21)
    measured, _ = own_measure(scores, np.array([5, 50, 500]))
    turned, _ = own_measure(scores[:, turn], np.array([5, 50, 500]))
    np.testing.assert_array_equal(turned, measured[:, turn])


def test_the_highest_is_the_first_as_often_as_any_other(rng):
    """Channels of chance alone, half of them with a heavy tail: 1 in K + 1 nights."""
    first, nights, slides = 0, 2000, 19
    for _ in range(nights):
        scores = rng.exponential(1 / np.log(10), (10, slides + 1, 1))
        scores[:5] = rng.pareto(0.5, (5, slides + 1, 1))
        measured, _ = own_measure(scores, np.full(10, 10))
        first += measured.max(axis=(0, 2)).argmax() == 0
    assert scipy.stats.binomtest(first, nights, 1 / (slides + 1)).pvalue > 1e-3


def test_calibration_never_passes_what_shifts_reach():
    shifted = np.array([0] * 398 + [20, 21])
    significance, wide = calibrated_significance(20, 0.1, shifted)
    assert wide == dispersion(shifted) > 15
    assert significance <= -np.log10(3 / 401)
    assert dispersion(np.array([])) == dispersion(np.zeros(5)) == 1.0


def test_the_same_night_gives_the_same_table():
    main, others = uncoupled_night(3, "geometric", channels=4)
    pd.testing.assert_frame_equal(find(main, others), find(main, others))
