"""Segment algebra against the library ``portion`` and its own laws."""

import pickle

import numpy as np
import portion
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from dq.errors import SegmentError
from dq.segments import Segments, format_segments, parse_segments, to_ns, to_ns_array

# small numbers make abutting, touching and equal borders common
PAIR = st.tuples(st.integers(-30, 30), st.integers(0, 12)).map(
    lambda p: (p[0], p[0] + p[1])
)
LISTS = st.lists(PAIR, max_size=8)
MANY = settings(max_examples=1500, deadline=None)


def theirs(pairs):
    """Build the same set with the outside library."""
    out = portion.empty()
    for start, end in pairs:
        out |= portion.closedopen(start, end)
    return out


def same(ours: Segments, outside) -> bool:
    want = [(i.lower, i.upper) for i in outside if not i.empty]
    return list(ours) == want


@pytest.mark.reference
@MANY
@given(LISTS, LISTS)
def test_union_intersection_difference(a, b):
    ours, other = Segments.of(a), Segments.of(b)
    assert same(ours, theirs(a))
    assert same(ours | other, theirs(a) | theirs(b))
    assert same(ours & other, theirs(a) & theirs(b))
    assert same(ours - other, theirs(a) - theirs(b))


@pytest.mark.reference
@MANY
@given(LISTS, st.integers(-40, 40), st.integers(0, 60))
def test_complement_and_clip(a, start, length):
    window = portion.closedopen(start, start + length)
    ours = Segments.of(a)
    assert same(ours.complement(start, start + length), window - theirs(a))
    assert same(ours.clip(start, start + length), window & theirs(a))


@pytest.mark.reference
@MANY
@given(LISTS, st.lists(st.integers(-45, 45), max_size=10))
def test_contains_and_total(a, times):
    ours, outside = Segments.of(a), theirs(a)
    assert ours.contains(times).tolist() == [t in outside for t in times]
    assert ours.total_ns == sum(i.upper - i.lower for i in outside if not i.empty)
    index = ours.index_of(times)
    for t, i in zip(times, index, strict=True):
        assert (i < 0) == (t not in outside)
        if i >= 0:
            assert ours.starts[i] <= t < ours.ends[i]


@pytest.mark.reference
@MANY
@given(LISTS, st.integers(-4, 6), st.integers(-4, 6))
def test_pad_widens_or_shrinks_each_segment(a, before, after):
    outside = portion.empty()
    for i in theirs(a):
        if not i.empty and i.upper + after > i.lower - before:
            outside |= portion.closedopen(i.lower - before, i.upper + after)
    assert same(Segments.of(a).pad(before, after), outside)


@MANY
@given(LISTS)
def test_text_round_trip(a):
    ours = Segments.of([(s * 123_456_789, e * 123_456_789) for s, e in a])
    text = format_segments(ours, header="one\ntwo")
    assert text.startswith("# one\n# two\n")
    assert parse_segments(text) == ours


@MANY
@given(LISTS, LISTS, LISTS)
def test_laws(a, b, c):
    a, b, c = Segments.of(a), Segments.of(b), Segments.of(c)
    assert a & (b | c) == (a & b) | (a & c)
    assert (a - b) | (a & b) == a
    assert (a | b).total_ns == a.total_ns + b.total_ns - (a & b).total_ns
    assert a.complement(-99, 99).complement(-99, 99) == a


def test_a_thousand_random_large_cases(rng):
    for _ in range(60):
        start = rng.integers(0, 10**6, 400)
        a = list(zip(start, start + rng.integers(0, 3000, 400), strict=True))
        start = rng.integers(0, 10**6, 300)
        b = list(zip(start, start + rng.integers(0, 5000, 300), strict=True))
        ours, other = Segments.of(a), Segments.of(b)
        assert same(ours & other, theirs(a) & theirs(b))
        assert same(ours - other, theirs(a) - theirs(b))


def test_abutting_segments_fuse_and_empty_ones_go():
    assert list(Segments.of([(5, 9), (1, 5), (20, 20)])) == [(1, 9)]
    assert not Segments.of([(1, 2)]) & Segments.of([(2, 3)])
    assert not Segments.none()


def test_borders_are_exact_where_floats_are_not():
    start = to_ns("1499999999.999999999")
    segments = Segments.of([(start, start + 1)])
    assert segments.contains([start, start + 1]).tolist() == [True, False]
    # the same two times are one number as float64
    assert float("1499999999.999999999") == float("1500000000.0")


def test_round_outward():
    a = Segments.from_seconds(["1.25", "2.5"], ["1.75", "4"])
    assert a.round_outward(10**9) == Segments.from_seconds([1], [4])


def test_segments_cannot_be_changed_and_travel():
    a = Segments.of([(1, 2)])
    with pytest.raises(AttributeError):
        a.starts = np.zeros(1)
    with pytest.raises(ValueError, match="read-only"):
        a.starts[0] = 7
    assert pickle.loads(pickle.dumps(a)) == a
    assert hash(a) == hash(Segments.of([(1, 2)]))
    assert (
        repr(Segments.of([(10**9 * k, 10**9 * k + 1) for k in range(9)])).count("[")
        == 5
    )


@pytest.mark.parametrize(
    ("value", "nanoseconds"),
    [
        ("1400000000.5", 1_400_000_000_500_000_000),
        (1_400_000_000, 1_400_000_000 * 10**9),
        (1.5, 1_500_000_000),
        (np.float64(2.25), 2_250_000_000),
        (np.int32(7), 7 * 10**9),
        ("-0.000000001", -1),
    ],
)
def test_seconds_become_exact_nanoseconds(value, nanoseconds):
    assert to_ns(value) == nanoseconds


def test_array_of_seconds_rounds_to_nanoseconds(rng):
    seconds = 1.4e9 + rng.random(1000) * 1e5
    assert to_ns_array(seconds).tolist() == [to_ns(float(s)) for s in seconds]


@pytest.mark.parametrize("value", ["soon", "", "nan", "inf", "1e30", None, True, [1]])
def test_no_time_is_refused(value):
    with pytest.raises(SegmentError, match=r"GPS time"):
        to_ns(value)


def test_finer_than_a_nanosecond_is_refused_not_rounded():
    with pytest.raises(SegmentError, match="finer than a nanosecond"):
        to_ns("1.0000000001")


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("1 2\n3\n", r"ready line 2: '3' holds 1 columns"),
        ("1 2 3\n", r"line 1: .* holds 3 columns"),
        ("# x\n\n5 4\n", r"line 3: end 4 lies before start 5"),
        ("a b\n", r"line 1: 'a' is no GPS time"),
    ],
)
def test_bad_text_names_its_line(text, message):
    with pytest.raises(SegmentError, match=message):
        parse_segments(text, where="ready")


def test_unequal_arrays_and_backward_segments_are_refused():
    with pytest.raises(SegmentError, match="as many starts as ends"):
        Segments([1, 2], [3])
    with pytest.raises(SegmentError, match="before its start"):
        Segments([3], [1])
