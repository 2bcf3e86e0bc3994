"""Files of a night: whole or not at all, the same bytes for the same tables."""

import json
import os

import h5py
import numpy as np
import pandas as pd
import portion
import pytest

from dq.errors import InputError, OutputError
from dq.segments import NS, Segments, parse_segments
from dq.tables import TRANSIENTS, VETOES, conform, empty
from dq.writers import (
    read_transients_h5,
    write_atomically,
    write_quality_mask,
    write_segments_folder,
    write_summary,
    write_transients_h5,
)
from dq.writers.summary import KEYS

GPS = 1_420_000_000


def vetoes(*rows):
    """Make a veto table from (start, end, name, category)."""
    rows = [
        (GPS * NS + round(a * NS), GPS * NS + round(b * NS), n, c, "witness", "", "")
        for a, b, n, c in rows
    ]
    return conform(pd.DataFrame(rows, columns=[c.name for c in VETOES]), VETOES)


def test_a_failed_write_leaves_the_old_file_and_nothing_else(tmp_path, monkeypatch):
    path = tmp_path / "x.csv"
    write_atomically(path, "old")

    def full(handle):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "fsync", full)
    with pytest.raises(OutputError, match=r"x\.csv.*No space left") as caught:
        write_atomically(path, "new")
    assert caught.value.exit_code == 1
    assert path.read_text() == "old"
    assert os.listdir(tmp_path) == ["x.csv"]


def test_new_files_have_ordinary_permissions(tmp_path):
    write_atomically(tmp_path / "x", b"1")
    mask = os.umask(0)
    os.umask(mask)
    assert (tmp_path / "x").stat().st_mode & 0o777 == 0o666 & ~mask


def test_transients_round_trip_with_equal_bytes(tmp_path, rng):
    table = conform(
        pd.DataFrame(
            {c.name: np.abs(rng.normal(5, 1, 20)).round(3) for c in TRANSIENTS}
        ).assign(tile_count=7),
        TRANSIENTS,
    )
    channels = {
        "OV-B": (table, {"sample_rate_hz": 64.0}),
        "OV-A": (empty(TRANSIENTS), {"sample_rate_hz": 8.0}),
    }
    write_transients_h5(tmp_path / "a.h5", channels)
    write_transients_h5(tmp_path / "b.h5", dict(reversed(channels.items())))
    assert (tmp_path / "a.h5").read_bytes() == (tmp_path / "b.h5").read_bytes()
    back = read_transients_h5(tmp_path / "a.h5")
    pd.testing.assert_frame_equal(back["OV-B"], table)
    assert len(back["OV-A"]) == 0
    assert list(read_transients_h5(tmp_path / "a.h5", ["OV-B", "OV-NONE"])) == ["OV-B"]
    with h5py.File(tmp_path / "a.h5") as file:
        assert file["OV-B/frequency_hz"].attrs["unit"] == "Hz"
        assert file["OV-B/snr"].shape == (20,)


def test_damaged_or_foreign_transients_file_is_one_line(tmp_path):
    (tmp_path / "a.h5").write_bytes(b"nothing")
    with pytest.raises(InputError, match=r"cannot read .*a\.h5"):
        read_transients_h5(tmp_path / "a.h5")
    with h5py.File(tmp_path / "b.h5", "w") as file:
        file.attrs["schema"] = 99
    with pytest.raises(InputError, match="schema 99"):
        read_transients_h5(tmp_path / "b.h5")


def test_segment_folder_holds_each_list_and_forgets_old_ones(tmp_path):
    analysed = Segments.from_seconds([GPS], [GPS + 100])
    table = vetoes((1, 2, "w-a", 3), (1.5, 4, "w-b", 2), (9, 10, "f", 1))
    write_segments_folder(tmp_path, analysed=analysed, vetoes=table)
    folder = tmp_path / "segments"

    def read(name):
        return parse_segments((folder / f"{name}.txt").read_text())

    assert read("analysed") == analysed
    assert read("all_vetoes") == Segments.from_seconds(
        [GPS + 1, GPS + 9], [GPS + 4, GPS + 10]
    )
    assert read("category2") == Segments.from_seconds([GPS + 1.5], [GPS + 4])
    assert read("w-a") == Segments.from_seconds([GPS + 1], [GPS + 2])
    write_segments_folder(tmp_path, analysed=analysed, vetoes=table[:1])
    assert not (folder / "w-b.txt").exists()
    assert not read("category1")


def test_reserved_names_are_refused(tmp_path):
    with pytest.raises(OutputError, match="reserved"):
        write_segments_folder(
            tmp_path, analysed=Segments.none(), vetoes=vetoes((0, 1, "analysed", 3))
        )


def test_mask_bits_second_by_second(tmp_path):
    analysed = Segments.from_seconds([GPS + 1.5], [GPS + 8])
    table = vetoes((2.9, 3.1, "w", 3), (5, 6, "f", 1))
    path = tmp_path / "m.h5"
    write_quality_mask(
        path, start_ns=GPS * NS, end_ns=(GPS + 10) * NS, analysed=analysed, vetoes=table
    )
    with h5py.File(path) as file:
        mask = file["mask"][:]
        names = [n.decode() for n in file["bit_names"][:]]
        assert file["mask"].attrs["gps_start"] == GPS
        assert len(file["bit_meanings"]) == len(names)
    assert len(mask) == 10

    def seconds(name):
        return np.flatnonzero(mask >> names.index(name) & 1).tolist()

    # second 1 was analysed only in part
    assert seconds("ANALYSED") == [2, 3, 4, 5, 6, 7]
    assert seconds("w") == seconds("CATEGORY_3") == [2, 3]
    assert seconds("f") == seconds("CATEGORY_1") == [5]
    assert seconds("CATEGORY_2") == []


@pytest.mark.reference
def test_mask_equals_a_recount_with_portion(tmp_path, rng):
    """Each second of a random night against the portion library's intervals."""
    seconds = 60

    def intervals(pairs):
        out = portion.empty()
        for low, high in pairs:
            out |= portion.closedopen(low, high)
        return out

    for night in range(5):
        rows = []
        for k in range(35):
            for start in rng.uniform(-2, seconds, 3):
                low = GPS * NS + round(start * NS)
                # some borders fall on whole seconds, where mistakes hide
                low = low if rng.uniform() < 0.5 else low // NS * NS
                high = low + int(rng.choice([1, NS // 3, NS, 2 * NS]))
                rows.append((low, high, f"v{k}", k % 3 + 1, "witness", "", ""))
        names = [c.name for c in VETOES]
        table = conform(pd.DataFrame(rows, columns=names), VETOES)
        edges = np.sort(rng.uniform(0, seconds, 6)).reshape(3, 2)
        analysed = Segments(*(np.rint(edges * NS).astype(int) + GPS * NS).T)
        path = tmp_path / f"{night}.h5"
        span = {"start_ns": GPS * NS, "end_ns": (GPS + seconds) * NS}
        write_quality_mask(path, **span, analysed=analysed, vetoes=table)
        with h5py.File(path) as file:
            mask = file["mask"][:]
            bits = [n.decode() for n in file["bit_names"][:]]
        judged = intervals(analysed)
        for bit, name in enumerate(bits):
            got = mask[:, bit // 32] >> (bit % 32) & 1
            if name.startswith("CATEGORY"):
                rows = table[table.category == int(name[-1])]
            else:
                rows = table[table.veto == name]
            mine = intervals(zip(rows.gps_start, rows.gps_end, strict=True))
            for second in range(seconds):
                low = (GPS + second) * NS
                whole = portion.closedopen(low, low + NS)
                if name == "ANALYSED":
                    assert got[second] == (whole in judged)
                else:
                    assert got[second] == (not (whole & mine).empty)


def test_more_vetoes_than_bits_go_into_further_words(tmp_path):
    table = vetoes(*((k, k + 0.5, f"w{k}", 3) for k in range(40)))
    path = tmp_path / "m.h5"
    write_quality_mask(
        path,
        start_ns=GPS * NS,
        end_ns=(GPS + 40) * NS,
        analysed=Segments.from_seconds([GPS], [GPS + 40]),
        vetoes=table,
    )
    with h5py.File(path) as file:
        mask, names = file["mask"][:], file["bit_names"][:]
    assert mask.shape == (40, 2)
    bit = list(names).index(b"w39")
    assert np.flatnonzero(mask[:, bit // 32] >> (bit % 32) & 1).tolist() == [39]


def test_summary_has_exactly_the_agreed_keys(tmp_path):
    values = dict.fromkeys(KEYS[1:])
    values["efficiency"] = {"all": float("nan"), "snr8": np.float64(0.5)}
    write_summary(tmp_path / "s.json", values)
    back = json.loads((tmp_path / "s.json").read_text())
    assert list(back) == list(KEYS)
    assert back["efficiency"] == {"all": None, "snr8": 0.5}
    del values["vetoes"]
    with pytest.raises(OutputError, match="vetoes"):
        write_summary(tmp_path / "s.json", values)
