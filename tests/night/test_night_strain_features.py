"""The feature pass: any range, any order, gaps, ends of data, and who is left out."""

import numpy as np
import planted
import pytest

from dq.features import FEATURES, NAMES
from dq.night.strain_features import (
    NO_SPECTRUM,
    NOT_READY,
    NOT_SETTLED,
    measure_transients,
)
from dq.segments import Segments

SHAPE = [f.name for f in FEATURES if f.group != "context"]
NS = 1_000_000_000


@pytest.fixture(scope="module")
def planted_channel():
    sources = planted.draw_sources(8, 6)
    data, times = planted.plant(
        sources, np.full(len(sources), 40.0), seed=31, spacing_s=11.3
    )
    return data, planted.find(data), times


def run(data, table, **options):
    settings = {"ready": None, "config": planted.config(), "f_low_hz": 10.0}
    return measure_transients(data, table, **{**settings, **options})


def test_every_transient_of_a_search_is_measured(planted_channel):
    data, table, _ = planted_channel
    found = run(data, table)
    assert found.left_out == {}
    assert list(found.table.columns) == list(NAMES)
    assert np.isfinite(found.table).all(axis=None)
    assert len(table) >= 48


def test_features_do_not_depend_on_what_else_was_asked_for(planted_channel):
    data, table, _ = planted_channel
    whole = run(data, table).table
    part = table.iloc[[40, 3, 17]]
    found = run(data, part, among=table).table
    assert found.index.tolist() == part.index.tolist()
    np.testing.assert_allclose(found, whole.loc[part.index], rtol=1e-8, atol=1e-8)


def test_the_search_block_does_not_matter(planted_channel):
    # other blocks see other frames of the spectrum and other places in the transform
    data, table, _ = planted_channel
    short = run(data, table, config=planted.config(tiles={"block_s": 32.0})).table
    whole = run(data, table).table
    for name in ("centroid_hz", "duration_s", "bandwidth_hz", "decay_q"):
        close = np.isclose(short[name], whole[name], rtol=0.05, atol=1e-3)
        assert close.mean() > 0.9, name


def test_only_batches_with_transients_are_read(planted_channel):
    data, table, _ = planted_channel
    data.samples_read = 0
    run(data, table.iloc[:0])
    assert data.samples_read == 0


def test_what_cannot_be_measured_is_named(planted_channel):
    data, table, _ = planted_channel
    gone = table.iloc[:4].copy()
    start = data.start_ns / NS
    for row, at in enumerate((start - 50, start + 0.7, start + 200.0, start + 300.0)):
        shift = at - gone.loc[row, "gps_time"]
        gone.loc[row, ["gps_time", "gps_start", "gps_end"]] += shift
    end = int(data.recorded.ends[-1])
    ready = Segments.of([(data.start_ns, data.start_ns + 290 * NS)])
    ready |= Segments.of([(data.start_ns + 310 * NS, end)])
    found = run(data, gone, ready=ready)
    assert found.left_out == {0: NOT_READY, 1: NOT_SETTLED, 3: NOT_READY}
    assert found.table.isna().all(axis=1).tolist() == [True, True, False, True]


def test_samples_that_are_not_finite_are_not_measured(planted_channel):
    data, table, _ = planted_channel
    values = data.values.copy()
    at = round((table.gps_time[5] - data.start_ns / NS) * 4096)
    values[at - 100 : at + 100] = np.nan
    broken = type(data)(data.name, 4096, data.start_ns, values)
    found = run(broken, table)
    assert found.left_out[5] == NOT_READY
    assert found.table.iloc[5].isna().all()


def test_too_little_data_for_a_spectrum_is_named(planted_channel):
    data, table, _ = planted_channel
    time = int(table.gps_time[9] * NS)
    ready = Segments.of([(time - 6 * NS, time + 6 * NS)])
    assert run(data, table.iloc[[9]], ready=ready).left_out == {0: NO_SPECTRUM}


def test_saturated_samples_reach_the_features(planted_channel):
    data, table, _ = planted_channel
    values = data.values.copy()
    row = int(table.snr.idxmax())
    low = round((table.gps_start[row] - data.start_ns / NS) * 4096)
    high = round((table.gps_end[row] - data.start_ns / NS) * 4096)
    limit = 0.3 * np.abs(values[low:high]).max()
    values[low:high] = np.clip(values[low:high], -limit, limit)
    clipped = type(data)(data.name, 4096, data.start_ns, values)
    assert run(data, table.iloc[[row]]).table.flat_s.item() == 0.0
    assert run(clipped, table.iloc[[row]]).table.flat_s.item() > 0.0
