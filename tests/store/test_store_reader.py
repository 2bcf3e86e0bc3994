"""Channels in files: what fits together, what is missing, what is refused."""

import pickle
from itertools import pairwise

import h5py
import numpy as np
import pytest

from dq.config import Layout, ReadyMask
from dq.errors import ChannelError, InputError
from dq.segments import NS, Segments
from dq.store import open_store

GPS = 1_420_000_000
RATE = 64


def write(path, pieces, *, rate=RATE, dtype="f8", name="OV-A", **options):
    """Write pieces (start, values) of one channel to one file."""
    path.parent.mkdir(parents=True, exist_ok=True)
    with h5py.File(path, "a") as file:
        for start, values in pieces:
            group = file.require_group(f"g{len(file)}")
            data = group.create_dataset(name, data=np.asarray(values, dtype), **options)
            data.attrs["gps_start"] = start
            data.attrs["sample_rate"] = rate


def ramp(start_s, seconds, rate=RATE):
    """Give samples that say when they were taken."""
    return np.arange(seconds * rate) + start_s * rate


def read(base, start=0, end=100, name="OV-A", patterns=("raw/*.h5",), **options):
    data = open_store(list(patterns), base=base, **options).channel(name)
    series = data.read((GPS + start) * NS, (GPS + end) * NS)
    return data, [
        ((s.start_ns - GPS * NS) / NS, (s.end_ns - GPS * NS) / NS, s.values)
        for s in series
    ]


def test_pieces_over_files_abut_overlap_and_gap(tmp_path):
    write(tmp_path / "raw/a.h5", [(GPS, ramp(0, 10)), (GPS + 10, ramp(10, 10))])
    write(tmp_path / "raw/b.h5", [(GPS + 18, ramp(18, 7)), (GPS + 40, ramp(40, 5))])
    write(tmp_path / "raw/c.h5", [(GPS + 20, ramp(20, 3))])
    data, parts = read(tmp_path)
    assert [(a, b) for a, b, _ in parts] == [(0, 25), (40, 45)]
    for start, _, values in parts:
        np.testing.assert_array_equal(values, start * RATE + np.arange(len(values)))
    assert data.recorded == Segments.from_seconds([GPS, GPS + 40], [GPS + 25, GPS + 45])
    assert data.rate == RATE


def test_reading_in_pieces_equals_reading_at_once(tmp_path, rng):
    write(tmp_path / "raw/a.h5", [(GPS, ramp(0, 30))], rate=RATE)
    write(tmp_path / "raw/b.h5", [(GPS + 29, ramp(29, 30))])
    data, whole = read(tmp_path)
    cuts = np.sort(np.append(rng.integers(0, 60 * NS, 40), [0, 60 * NS]))
    parts = []
    for a, b in pairwise(cuts):
        parts += [s.values for s in data.read(GPS * NS + int(a), GPS * NS + int(b))]
    np.testing.assert_array_equal(np.concatenate(parts), whole[0][2])


@pytest.mark.parametrize(
    "dtype", ["i1", "u2", "i2", "i4", "i8", "f4", "f8", ">f4", "f2"]
)
@pytest.mark.parametrize("options", [{}, {"compression": "gzip", "chunks": (97,)}])
def test_any_numeric_type_and_storage(tmp_path, dtype, options):
    values = np.arange(10 * RATE) % 100
    write(tmp_path / "raw/a.h5", [(GPS, values)], dtype=dtype, **options)
    _, parts = read(tmp_path)
    assert parts[0][2].dtype in (np.float32, np.float64)
    np.testing.assert_array_equal(parts[0][2], values)


def test_large_integers_keep_every_digit(tmp_path):
    values = np.array([2**24 + 1, 2**31 - 1, -(2**31)] * RATE)
    write(tmp_path / "raw/a.h5", [(GPS, values)], dtype="i4")
    np.testing.assert_array_equal(read(tmp_path)[1][0][2], values)


def test_nan_and_infinite_samples_part_the_series(tmp_path):
    values = ramp(0, 10).astype(float)
    values[100:164] = np.nan
    values[300] = np.inf
    write(tmp_path / "raw/a.h5", [(GPS, values)])
    data, parts = read(tmp_path)
    assert [len(v) for _, _, v in parts] == [100, 136, 339]
    assert parts[1][0] == 164 / RATE
    # the header still says recorded: the difference is what is not finite
    assert data.recorded.total_s == 10


def test_overlap_that_disagrees_names_time_and_channel(tmp_path):
    other = ramp(8, 5).astype(float)
    other[32] += 1
    write(tmp_path / "raw/a.h5", [(GPS, ramp(0, 10)), (GPS + 8, other)])
    data = open_store(["raw/*.h5"], base=tmp_path).channel("OV-A")
    with pytest.raises(
        ChannelError, match=r"OV-A.*different samples from GPS 1420000008\.5"
    ):
        data.read(GPS * NS, (GPS + 20) * NS)
    # away from the disagreement the channel is still readable
    assert len(data.read(GPS * NS, (GPS + 5) * NS)) == 1


def test_equal_nan_in_an_overlap_agree(tmp_path):
    values = ramp(0, 10).astype(float)
    values[-10:] = np.nan
    write(
        tmp_path / "raw/a.h5", [(GPS, values), (GPS + 9, np.append(values[-64:], 5.0))]
    )
    _, parts = read(tmp_path)
    assert [len(v) for _, _, v in parts] == [630, 1]


def test_overlap_between_samples_is_refused(tmp_path):
    write(
        tmp_path / "raw/a.h5", [(GPS, ramp(0, 10)), (GPS + 9 + 0.4 / RATE, ramp(9, 3))]
    )
    data = open_store(["raw/*.h5"], base=tmp_path).channel("OV-A")
    with pytest.raises(ChannelError, match="between samples"):
        data.read(GPS * NS, (GPS + 20) * NS)


def test_rate_that_changes_costs_the_channel(tmp_path):
    write(tmp_path / "raw/a.h5", [(GPS, ramp(0, 10))])
    write(tmp_path / "raw/b.h5", [(GPS + 10, ramp(10, 10))], rate=128)
    store = open_store(["raw/*.h5"], base=tmp_path)
    with pytest.raises(ChannelError, match=r"rate changes from 64 Hz to 128 Hz"):
        store.channel("OV-A")


@pytest.mark.parametrize(
    ("name", "value", "message"),
    [
        ("sample_rate", 0, "sample_rate = 0 Hz must lie within"),
        ("sample_rate", -4096.0, "must lie within"),
        ("sample_rate", 2e6, "must lie within"),
        ("sample_rate", np.nan, "not finite"),
        ("gps_start", np.inf, "not finite"),
        ("gps_start", "1420000000", "is no number"),
        ("gps_start", 1e30, "out of range"),
        ("gps_start", None, "'gps_start' is missing"),
        ("sample_rate", [1, 2], "is no number"),
    ],
)
def test_impossible_headers_are_listed_by_name(tmp_path, name, value, message):
    write(tmp_path / "raw/a.h5", [(GPS, ramp(0, 10))])
    write(tmp_path / "raw/b.h5", [(GPS, ramp(0, 10))], name="OV-B")
    with h5py.File(tmp_path / "raw/b.h5", "a") as file:
        attributes = file["g0/OV-B"].attrs
        del attributes[name]
        if value is not None:
            attributes[name] = value
    store = open_store(["raw/*.h5"], base=tmp_path)
    assert store.channels == ["OV-A"]
    assert [p.channel for p in store.problems] == ["OV-B"]
    assert message in store.problems[0].text


def test_shapes_types_and_names_that_are_no_channel(tmp_path):
    write(tmp_path / "raw/a.h5", [(GPS, ramp(0, 10))])
    with h5py.File(tmp_path / "raw/a.h5", "a") as file:
        for name, data in (
            ("OV-2D", np.zeros((3, 4))),
            ("OV-TEXT", np.array([b"a"])),
            ("OV-COMPLEX", np.zeros(3, complex)),
            ("OV BLANK", np.zeros(3)),
        ):
            item = file.create_dataset(name, data=data)
            item.attrs["gps_start"], item.attrs["sample_rate"] = GPS, 64
        file.create_dataset("somebody-elses-table", data=np.zeros((2, 2)))
    store = open_store(["raw/*.h5"], base=tmp_path)
    assert store.channels == ["OV-A"]
    assert sorted(p.channel for p in store.problems) == [
        "OV BLANK",
        "OV-2D",
        "OV-COMPLEX",
        "OV-TEXT",
    ]


def test_unreadable_files_cost_themselves_only(tmp_path):
    write(tmp_path / "raw/a.h5", [(GPS, ramp(0, 10))])
    whole = (tmp_path / "raw/a.h5").read_bytes()
    (tmp_path / "raw/b.h5").write_bytes(whole[: len(whole) // 2])
    (tmp_path / "raw/c.h5").write_bytes(b"")
    (tmp_path / "raw/d.h5").write_bytes(b"no HDF5 at all")
    store = open_store(["raw/*.h5"], base=tmp_path)
    assert store.channels == ["OV-A"]
    assert len(store.problems) == 3
    assert all("unreadable file" in p.text for p in store.problems)


def test_damaged_chunk_costs_its_time_only(tmp_path, rng):
    values = rng.standard_normal(60 * RATE)
    path = tmp_path / "raw/a.h5"
    options = {"compression": "gzip", "chunks": (10 * RATE,), "fletcher32": True}
    write(path, [(GPS, values)], **options)
    with h5py.File(path) as file:
        info = file["g0/OV-A"].id.get_chunk_info(2)
    content = bytearray(path.read_bytes())
    middle = info.byte_offset + info.size // 2
    content[middle : middle + 8] = b"\xff" * 8
    path.write_bytes(content)
    data, parts = read(tmp_path)
    assert [(round(a), round(b)) for a, b, _ in parts] == [(0, 20), (30, 60)]
    assert data.read_problems
    np.testing.assert_array_equal(parts[0][2], values[: len(parts[0][2])])


def test_reading_is_lazy(tmp_path):
    write(tmp_path / "raw/a.h5", [(GPS, ramp(0, 1000))], chunks=(640,), dtype="f4")
    data = open_store(["raw/*.h5"], base=tmp_path).channel("OV-A")
    part = data.read((GPS + 500) * NS, (GPS + 501) * NS)[0].values
    assert part.nbytes == 4 * RATE
    assert part.base is None or part.base.nbytes == part.nbytes


def test_channel_travels_to_another_process(tmp_path):
    write(tmp_path / "raw/a.h5", [(GPS, ramp(0, 10))])
    data, parts = read(tmp_path)
    copy = pickle.loads(pickle.dumps(data))
    again = copy.read(GPS * NS, (GPS + 100) * NS)[0].values
    np.testing.assert_array_equal(again, parts[0][2])


def test_float_starts_and_odd_rates_fit_together(tmp_path):
    rate = 59.94
    n = 600
    start = GPS + 0.37
    write(tmp_path / "raw/a.h5", [(start, np.arange(n))], rate=rate)
    write(tmp_path / "raw/b.h5", [(start + n / rate, n + np.arange(n))], rate=rate)
    data, parts = read(tmp_path)
    assert len(parts) == 1
    np.testing.assert_array_equal(parts[0][2], np.arange(2 * n))
    assert float(data.rate) == pytest.approx(rate)


def test_sample_times_do_not_drift(tmp_path):
    """Sample i lies at start + i / rate however far into the night."""
    write(tmp_path / "raw/a.h5", [(GPS, np.zeros(1000 * 50))], rate=50)
    data = open_store(["raw/*.h5"], base=tmp_path).channel("OV-A")
    series = data.read((GPS + 999) * NS, (GPS + 1000) * NS)[0]
    assert series.start_ns == (GPS + 999) * NS
    assert series.end_ns == (GPS + 1000) * NS
    assert series.index_at_or_after((GPS + 999) * NS + 20_000_000) == 1
    assert series.index_at_or_after((GPS + 999) * NS + 22_000_000) == 2


def archive(path, start, values, mask, step=1 / 256):
    """Write a file in the public archive layout of open strain data."""
    path.parent.mkdir(parents=True, exist_ok=True)
    with h5py.File(path, "w") as file:
        strain = file.create_dataset("strain/Strain", data=values)
        strain.attrs["Xstart"] = start
        strain.attrs["Xspacing"] = step
        strain.attrs["Npoints"] = len(values)
        bits = file.create_dataset("quality/simple/DQmask", data=mask)
        bits.attrs["Xstart"] = start
        bits.attrs["Xspacing"] = 1.0
        file.create_dataset("meta/GPSstart", data=start)


def test_public_archive_layout_with_its_mask(tmp_path, rng):
    values = rng.standard_normal(256 * 32)
    mask = np.full(32, 0b0111, dtype=np.uint32)
    mask[10:12] = 0b0110
    mask[20] = 0b0001
    archive(tmp_path / "raw/s.hdf5", GPS, values, mask)
    write(tmp_path / "raw/a.h5", [(GPS, ramp(0, 32))])
    store = open_store(
        ["raw/*"],
        base=tmp_path,
        layout=Layout(
            dataset="strain/Strain",
            channel="OV-STRAIN",
            start_attribute="Xstart",
            step_attribute="Xspacing",
        ),
        ready_mask=ReadyMask(dataset="quality/simple/DQmask", bits=[0, 2]),
    )
    assert store.channels == ["OV-A", "OV-STRAIN"]
    assert not store.problems
    data = store.channel("OV-STRAIN")
    assert data.rate == 256
    np.testing.assert_array_equal(
        data.read(GPS * NS, (GPS + 99) * NS)[0].values, values
    )
    assert store.ready() == Segments.from_seconds(
        [GPS, GPS + 12, GPS + 21], [GPS + 10, GPS + 20, GPS + 32]
    )


def test_layout_without_its_attribute_is_a_problem(tmp_path):
    archive(tmp_path / "raw/s.h5", GPS, np.zeros(256), np.ones(1, int))
    layout = Layout(
        dataset="strain/Strain", start_attribute="t0", step_attribute="Xspacing"
    )
    store = open_store(["raw/*"], base=tmp_path, layout=layout)
    assert store.channels == []
    assert "'t0' is missing" in store.problems[0].text


def test_file_patterns(tmp_path):
    write(tmp_path / "raw/a.h5", [(GPS, ramp(0, 10))])
    store = open_store(["raw/*.h5", "raw/a.*"], base=tmp_path)
    # matched twice, counted once: no overlap, no doubt
    assert len(store.channel("OV-A").read(GPS * NS, (GPS + 10) * NS)) == 1
    with pytest.raises(InputError, match=r"'none/\*\.h5' matches no file"):
        open_store(["none/*.h5"], base=tmp_path)
    with pytest.raises(InputError, match="names a folder"):
        open_store(["raw"], base=tmp_path)


def test_fingerprints_follow_the_files(tmp_path):
    import os

    write(tmp_path / "raw/a.h5", [(GPS, ramp(0, 10))])
    write(tmp_path / "raw/b.h5", [(GPS, ramp(0, 10))], name="OV-B")
    one = open_store(["raw/*.h5"], base=tmp_path)
    before = one.fingerprint("OV-A"), one.content_id("OV-A")
    other = one.fingerprint("OV-B")
    os.utime(tmp_path / "raw/a.h5", (1, 1))
    two = open_store(["raw/*.h5"], base=tmp_path)
    assert two.fingerprint("OV-A") != before[0]
    assert two.content_id("OV-A") == before[1]
    assert two.fingerprint("OV-B") == other
    write(tmp_path / "raw/a.h5", [(GPS + 10, ramp(10, 1))])
    assert open_store(["raw/*.h5"], base=tmp_path).content_id("OV-A") != before[1]
