"""The share of signals that vetoes take away."""

import numpy as np
import pandas as pd
import pytest
import scipy.stats

from dq.cost import random_times, signal_losses
from dq.cost.signal_loss import vetoes_itself
from dq.counting import clopper_pearson
from dq.segments import NS, Segments
from dq.tables import PLANTED, conform

GPS = 1_420_000_000
ANALYSED = Segments.from_seconds([GPS, GPS + 600], [GPS + 500, GPS + 1000])


@pytest.mark.reference
def test_random_times_are_even_over_analysed_time(rng):
    """Kolmogorov-Smirnov against the even law; a law that skips time fails it."""
    times = random_times(ANALYSED, 20_000, rng)
    assert ANALYSED.contains(times).all()
    seconds = times / NS - GPS
    line = np.where(seconds < 500, seconds, seconds - 100) / 900
    assert scipy.stats.kstest(line, "uniform").pvalue > 0.01
    assert scipy.stats.kstest(seconds / 1000, "uniform").pvalue < 1e-6


def test_loss_agrees_with_dead_time_for_vetoes_that_do_not_know(rng):
    inside = 0
    for _ in range(200):
        starts = GPS + rng.uniform(0, 990, 20)
        veto = Segments.from_seconds(starts, starts + rng.exponential(3, 20)) & ANALYSED
        times = random_times(ANALYSED, 1000, rng)
        row = signal_losses({"a": veto}, times, families={}).loc["a"]
        dead = veto.total_s / ANALYSED.total_s
        inside += row.signal_loss_low <= dead <= row.signal_loss_high
    low, high = clopper_pearson(inside, 200, 0.99)
    assert low <= 0.95 <= high or inside >= 190


def planted(*rows):
    names = ["gps_time", "found", "gps_start", "gps_end", "family"]
    frame = pd.DataFrame(rows, columns=names)
    for column in ("gps_time", "gps_start", "gps_end"):
        frame[column] += GPS
    return conform(frame.assign(kind="burst", snr=9.0), PLANTED)


def test_a_family_veto_takes_signals_because_they_are_there():
    """By hand: of five, one is sorted into the family, one lies in another's time."""
    table = planted(
        (10.0, True, 9.5, 10.2, "thunder"),
        (50.0, True, 49.9, 50.1, "whistle"),
        (90.0, False, np.nan, np.nan, None),
        (130.0, True, 129.0, 129.5, "thunder"),
        (170.0, True, 170.3, 170.5, "thunder"),
    )
    assert vetoes_itself(table, "thunder", 0.1).tolist() == [1, 0, 0, 0, 0]
    assert vetoes_itself(table, "thunder", 0.4).tolist() == [1, 0, 0, 0, 1]
    assert vetoes_itself(table, "thunder", 0.6).tolist() == [1, 0, 0, 1, 1]
    segments = {
        "witness-a": Segments.from_seconds([GPS + 49], [GPS + 51]),
        "family-thunder": Segments.none(),
    }
    out = signal_losses(
        segments,
        np.zeros(0, dtype=np.int64),
        families={"family-thunder": "thunder"},
        planted=table,
        padding_s=0.1,
    )
    assert out.loc["family-thunder"].tolist() == [0.2, *clopper_pearson(1, 5)]
    assert out.loc["all"].signal_loss == 0.4


@pytest.mark.parametrize("sorted_", [None, "unsorted"])
def test_a_family_veto_that_was_not_measured_has_no_loss(sorted_):
    table = None if sorted_ is None else planted((10.0, True, 9.0, 11.0, sorted_))
    out = signal_losses(
        {"family-thunder": Segments.from_seconds([GPS], [GPS + 5])},
        np.array([GPS * NS]),
        families={"family-thunder": "thunder"},
        planted=table,
    )
    assert out.isna().all().all()
