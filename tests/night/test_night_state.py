"""State files: what comes back, and what does not."""

import numpy as np
import pandas as pd
import pytest

from dq.night.channel import ChannelResult
from dq.night.state import load_state, save_state, state_path
from dq.segments import Segments
from dq.tables import TRANSIENTS, conform


@pytest.fixture
def result():
    table = {c.name: np.array([1.5, 2.25]) for c in TRANSIENTS}
    table["tile_count"] = np.array([3, 9])
    table["snr"] = np.array([7.123456789012345, np.inf])
    return ChannelResult(
        channel="OV:A-1",
        sample_rate=2048.5,
        f_low_hz=10.25,
        f_high_hz=900.0,
        transients=conform(pd.DataFrame(table), TRANSIENTS),
        analysed=Segments.of([(0, 5), (7, 1_420_000_000_123_456_789)]),
        missing=Segments.none(),
        unjudged=Segments.of([(5, 7)]),
        faults={"saturation": Segments.of([(1, 2)]), "flat_line": Segments.none()},
        notes=["σ is wide", "x; y"],
    )


def test_a_result_comes_back_whole(tmp_path, result):
    path = state_path(tmp_path, result.channel)
    save_state(path, "key", result)
    back = load_state(path, "key")
    pd.testing.assert_frame_equal(back.transients, result.transients, check_exact=True)
    for name in ("channel", "sample_rate", "f_low_hz", "f_high_hz", "notes", "faults"):
        assert getattr(back, name) == getattr(result, name)
    for name in ("analysed", "missing", "unjudged"):
        assert getattr(back, name) == getattr(result, name)


def test_an_empty_table_comes_back(tmp_path, result):
    from dataclasses import replace

    from dq.tables import empty

    path = tmp_path / "x.h5"
    save_state(path, "key", replace(result, transients=empty(TRANSIENTS), notes=[]))
    assert len(load_state(path, "key").transients) == 0


def test_another_key_or_a_damaged_file_is_no_state(tmp_path, result):
    path = tmp_path / "x.h5"
    assert load_state(path, "key") is None
    save_state(path, "key", result)
    assert load_state(path, "other") is None
    whole = path.read_bytes()
    path.write_bytes(whole[: len(whole) // 2])
    assert load_state(path, "key") is None
    path.write_bytes(b"not HDF5")
    assert load_state(path, "key") is None


def test_state_names_are_safe_and_unique(tmp_path):
    names = ["OV:A", "OV_A", "ov_a", "A" * 255, "A" * 254 + "B", "..", "x/../y"]
    paths = [state_path(tmp_path, name) for name in names]
    assert len({p.name.lower() for p in paths}) == len(names)
    for path in paths:
        assert path.parent == tmp_path
        assert len(path.name) < 128
        assert "/" not in path.name
        assert ":" not in path.name


def test_a_state_belongs_to_the_code_that_made_it():
    from dq.night.code import ENGINE, code_digest

    engine = code_digest(*ENGINE)
    assert engine == code_digest(*ENGINE)
    assert engine != code_digest()
    assert engine != code_digest(*ENGINE[1:])
