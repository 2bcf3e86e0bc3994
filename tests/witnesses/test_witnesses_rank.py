"""Witness statistics: chance is chance, planted couplings are found, bursts are not."""

import numpy as np
import pandas as pd
import pytest
import scipy.stats

from dq.config import Witnesses
from dq.segments import Segments
from dq.tables import WITNESSES
from dq.witnesses import find_witnesses, veto_windows
from dq.witnesses.windows import FusedTime, hits

GPS = 1_420_000_000
HOUR = 3600
WHOLE = Segments.from_seconds([GPS], [GPS + HOUR])
QUICK = Witnesses(snr_thresholds=[5.5, 10.0], half_windows_s=[0.1, 0.5])


def table(times, snr=8.0):
    times = np.sort(np.asarray(times, float))
    columns = dict.fromkeys(("gps_time", "gps_start", "gps_end"), times)
    return pd.DataFrame(columns | {"snr": np.broadcast_to(snr, times.shape)})


def uniform(rng, n):
    return GPS + rng.uniform(0, HOUR, n)


def find(strain, auxiliary, safety=None, settings=QUICK, analysed=WHOLE, judged=None):
    judged = judged or dict.fromkeys(auxiliary, WHOLE)
    return find_witnesses(
        strain,
        auxiliary,
        analysed=analysed,
        auxiliary_analysed=judged,
        safety=safety or {},
        settings=settings,
    )


def test_planted_coupling_is_found_and_bystanders_are_not(rng):
    causes = uniform(rng, 40)
    strain = table(np.concatenate([causes + 0.02, uniform(rng, 60)]))
    auxiliary = {
        "OV-CAUSE": table(np.concatenate([causes, uniform(rng, 30)]), 20.0),
        "OV-OTHER": table(uniform(rng, 200)),
        "OV-CLOCK": table(GPS + np.arange(5, HOUR, 37.0)),
        "OV-QUIET": table([]),
    }
    out = find(strain, auxiliary)
    assert list(out.columns) == [c.name for c in WITNESSES]
    first = out.iloc[0]
    assert (first.channel, first.order, bool(first.accepted)) == ("OV-CAUSE", 1, True)
    assert first.half_window_s == 0.1
    assert first.coincidences >= 40
    assert first.efficiency == first.coincidences / 100
    assert out.accepted.sum() == 1
    assert "no transients" in out.set_index("channel").reason["OV-QUIET"]


def test_significance_and_expectation_are_the_formulas(rng):
    strain, other = table(uniform(rng, 50)), table(uniform(rng, 80))
    settings = Witnesses(snr_thresholds=[5.5], half_windows_s=[0.5])
    row = find(strain, {"OV-A": other}, settings=settings).iloc[0]
    windows = veto_windows(other, snr_threshold=5.5, before_s=0.5, after_s=0.5) & WHOLE
    inside = windows.contains(np.round(strain.gps_time.to_numpy() * 1e9).astype(int))
    assert row.coincidences == inside.sum()
    assert row.dead_time_s == pytest.approx(windows.total_s)
    assert row.expected == pytest.approx(50 * windows.total_s / HOUR)
    tail = scipy.stats.poisson.sf(row.coincidences - 1, row.expected)
    assert row.significance == pytest.approx(-np.log10(tail), abs=1e-9)


def test_chance_efficiency_is_the_dead_time(rng):
    """Expected coincidences of unrelated channels, over many of them."""
    strain = table(uniform(rng, 400))
    settings = Witnesses(snr_thresholds=[5.5], half_windows_s=[0.2])
    auxiliary = {f"OV-{k}": table(uniform(rng, 500)) for k in range(60)}
    out = find(strain, auxiliary, settings=settings)
    n_strain, n_aux, w = 400, 500, 0.2
    formula = n_strain * (1 - np.exp(-2 * w * n_aux / HOUR))
    assert out.expected.mean() == pytest.approx(formula, rel=0.01)
    error = np.sqrt(formula / 60)
    assert out.coincidences.mean() == pytest.approx(formula, abs=4 * error)


def test_expected_coincidences_of_the_worked_case():
    # 1000 and 5000 events, +-0.1 s, a day: 11.574 without overlap, 11.507 as a union
    mu = 1000 * 5000 * 0.2 / 86400
    union = 1000 * (1 - np.exp(-0.2 * 5000 / 86400))
    assert mu == pytest.approx(11.574, abs=5e-4)
    assert union == pytest.approx(11.507, abs=5e-4)


def test_unsafe_channels_are_measured_and_never_accepted(rng):
    causes = uniform(rng, 50)
    strain = table(causes)
    auxiliary = {"OV-UNSAFE": table(causes), "OV-A": table(uniform(rng, 2000))}
    out = find(strain, auxiliary, safety={"OV-UNSAFE": "no"}).set_index("channel")
    assert not out.accepted["OV-UNSAFE"]
    assert out.safety["OV-UNSAFE"] == "unsafe"
    assert "unsafe" in out.reason["OV-UNSAFE"]
    assert out.coincidences["OV-UNSAFE"] == 50
    assert pd.isna(out.order["OV-UNSAFE"])
    # all transients have SNR 8, so the threshold 10 was no trial
    assert (out.trials == 4).all()


def test_p_value_is_the_calibrated_chance_times_all_trials(rng):
    strain = table(uniform(rng, 300))
    auxiliary = {f"OV-{k}": table(uniform(rng, 200), 20.0) for k in range(5)}
    out = find(strain, auxiliary)
    # one set of transients, two half-windows; points have no activity beside the peak
    assert (out.trials == 5 * 2).all()
    want = np.minimum(1, out.trials * 10**-out.calibrated_significance)
    np.testing.assert_allclose(out.p_value, want.astype(float), rtol=1e-4)
    assert (out.calibrated_significance <= out.significance).all()


def test_a_delay_as_long_as_the_night_is_wide_finds_nothing(rng):
    """Accepted rows stand on time, not on numbers: shifted, the coupling is gone."""
    causes = uniform(rng, 80)
    near = find(table(causes + 0.02), {"OV-A": table(causes)})
    far = find(table((causes - GPS + 777.7) % HOUR + GPS), {"OV-A": table(causes)})
    assert near.accepted.all()
    assert not far.accepted.any()
    assert "not significant: p = " in far.reason.iloc[0]


def test_rest_is_in_order_of_significance(rng):
    strain = table(uniform(rng, 300))
    auxiliary = {f"OV-{k}": table(uniform(rng, 200)) for k in range(9)}
    auxiliary["OV-X"] = table([])
    out = find(strain, auxiliary)
    assert not out.accepted.any()
    assert out.significance[:-1].is_monotonic_decreasing
    assert out.channel.iloc[-1] == "OV-X"


def test_only_jointly_analysed_time_counts(rng):
    half = Segments.from_seconds([GPS], [GPS + HOUR / 2])
    strain, other = table(uniform(rng, 200)), table(uniform(rng, 200))
    settings = Witnesses(snr_thresholds=[5.5], half_windows_s=[0.5])
    row = find(strain, {"OV-A": other}, settings=settings, judged={"OV-A": half}).iloc[
        0
    ]
    assert row.dead_time_s <= HOUR / 2
    inside = (strain.gps_time < GPS + HOUR / 2).sum()
    assert row.efficiency == pytest.approx(row.coincidences / inside)


def test_three_in_one_window_are_one_coincidence():
    strain = table(GPS + 100 + np.arange(10) * 0.01)
    out = find(strain, {"OV-A": table([GPS + 100.05])})
    assert not out.accepted.iloc[0]
    assert "fewer than 3 separate coincidences: 1" in out.reason.iloc[0]


def test_empty_inputs_are_answers():
    out = find(table([]), {"OV-A": table([GPS + 5.0])})
    assert not out.accepted.any()
    assert len(find(table([GPS + 1.0]), {})) == 0
    out = find(table([GPS + 1.0]), {"OV-A": table([])}, analysed=Segments.none())
    assert not out.accepted.any()


def test_order_does_not_depend_on_the_order_of_channels(rng):
    causes = uniform(rng, 50)
    auxiliary = {n: table(causes) for n in ("OV-B", "OV-A", "OV-C")}
    one = find(table(causes), auxiliary)
    two = find(table(causes), dict(reversed(auxiliary.items())))
    pd.testing.assert_frame_equal(one, two)
    # three copies of one cause: one is chosen, the others repeat it
    assert one.accepted.tolist() == [True, False, False]
    assert one.redundant_with.tolist()[1:] == [one.channel[0]] * 2


def test_fused_time_measures_covered_time(rng):
    segments = Segments.of([(10, 20), (30, 35), (50, 90)])
    fused = FusedTime(segments)
    times = np.arange(0, 100)
    slow = [segments.clip(0, int(t)).total_ns if t else 0 for t in times]
    assert fused.position(times).tolist() == slow
    assert fused.total == 55


def test_hits_are_half_open():
    starts, ends = np.array([10, 30]), np.array([20, 40])
    assert hits(np.array([9, 10, 19, 20, 35, 40]), starts, ends).tolist() == [
        -1, 0, 0, -1, 1, -1,
    ]  # fmt: skip
