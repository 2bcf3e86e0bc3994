"""Clusters of tiles: what belongs together, what does not, and the slow twin."""

from dataclasses import replace

import numpy as np
import pytest

from dq.transients import Marks, label_marks, split_finished, summarise
from dq.transients.cluster import SAME_TIME, overlap_pairs
from dq.transients.place import peak_shift


def marks(rows):
    """Build marks from (start, end, low, high, energy)."""
    a = np.array(rows, dtype=float).reshape(-1, 5)
    start, end, low, high, energy = a.T
    return Marks(
        start=start,
        end=end,
        low=low,
        high=high,
        time=(start + end) / 2,
        frequency=np.sqrt(low * high),
        q=np.full(len(a), 8.0),
        energy=energy,
        noise=np.full(len(a), 2.0),
        count=np.ones(len(a), dtype=int),
        plane=np.zeros(len(a), dtype=int),
        loud=np.ones(len(a), dtype=bool),
        score=np.zeros(len(a)),
        summed=np.zeros(len(a)),
        reach_s=np.zeros(len(a)),
        reach_hz=np.zeros(len(a)),
    )


def slow_labels(m):
    """Give the slow twin: repeat merging until nothing changes."""
    groups = [{i} for i in range(len(m))]

    def touch(a, b):
        return (
            m.start[a] < m.end[b]
            and m.start[b] < m.end[a]
            and m.low[a] < m.high[b]
            and m.low[b] < m.high[a]
        )

    def merge(groups, together):
        changed = True
        while changed:
            changed = False
            for i in range(len(groups)):
                for j in range(i + 1, len(groups)):
                    if together(groups[i], groups[j]):
                        groups[i] |= groups.pop(j)
                        changed = True
                        break
                if changed:
                    break
        return groups

    groups = merge(groups, lambda a, b: any(touch(i, j) for i in a for j in b))
    spans = {
        id(g): (min(m.start[i] for i in g), max(m.end[i] for i in g)) for g in groups
    }
    frozen = [(spans[id(g)], g) for g in groups]
    # simultaneity is judged between the clusters of the first step, not regrown
    parent = list(range(len(frozen)))

    def root(i):
        while parent[i] != i:
            i = parent[i]
        return i

    for i, ((s1, e1), _) in enumerate(frozen):
        for j, ((s2, e2), _) in enumerate(frozen[:i]):
            common = min(e1, e2) - max(s1, s2)
            if common > 0 and common >= SAME_TIME * (max(e1, e2) - min(s1, s2)):
                parent[root(i)] = root(j)
    names = np.empty(len(m), int)
    for i, (_, g) in enumerate(frozen):
        names[list(g)] = root(i)
    return names


def same_partition(a, b):
    pairs = set(zip(a.tolist(), b.tolist(), strict=True))
    return len(pairs) == len(set(a.tolist())) == len(set(b.tolist()))


def test_labels_equal_the_slow_twin(rng):
    for size in (1, 2, 5, 20, 60):
        for _ in range(20):
            start = rng.uniform(0, 10, size)
            low = rng.uniform(10, 100, size)
            m = marks(
                np.column_stack(
                    [
                        start,
                        start + rng.exponential(0.5, size),
                        low,
                        low + rng.exponential(15, size),
                        rng.uniform(16, 100, size),
                    ]
                )
            )
            assert same_partition(label_marks(m), slow_labels(m))


def test_overlap_pairs_are_all_pairs(rng):
    start = np.sort(rng.uniform(0, 10, 200))
    end = start + rng.exponential(0.3, 200)
    got = {
        (int(a), int(b))
        for left, right in overlap_pairs(start, end)
        for a, b in zip(left, right, strict=True)
    }
    want = {(i, j) for i in range(200) for j in range(i + 1, 200) if start[j] < end[i]}
    assert got == want


def test_teeth_of_a_comb_are_one_transient():
    m = marks([(0, 1, 50, 52, 40), (0.05, 1.02, 100, 104, 90), (0, 0.9, 150, 156, 30)])
    table = summarise(m, label_marks(m))
    assert table["time"].size == 1
    assert table["snr"][0] == pytest.approx(np.sqrt(2 * 89))
    assert (table["low"][0], table["high"][0]) == (50, 156)


def test_a_click_inside_a_long_low_note_stays_its_own():
    m = marks([(0, 3, 20, 30, 90), (1, 1.05, 300, 600, 40)])
    assert len(set(label_marks(m))) == 2


def test_abutting_tiles_do_not_overlap():
    m = marks([(0, 1, 20, 30, 90), (1, 2, 20, 30, 40)])
    assert len(set(label_marks(m))) == 2


def test_reach_joins_what_nearly_overlaps():
    m = marks([(0, 1, 20, 30, 90), (1.3, 2, 20, 30, 40)])
    joined = replace(m, reach_s=np.full(2, 0.2))
    assert len(set(label_marks(m))) == 2
    assert len(set(label_marks(joined))) == 1
    # neighbours are sought further out, but the transient does not grow by it
    assert summarise(joined, label_marks(joined))["end"][0] == 2


def test_summary_of_one_cluster():
    m = marks([(0, 1, 20, 30, 33), (0.5, 2, 25, 40, 129)])
    table = summarise(m, label_marks(m))
    assert table["snr"][0] == pytest.approx(16)
    # h_rss = rho sqrt(S / 2), S = 2
    assert table["amplitude"][0] == pytest.approx(16)
    assert (table["start"][0], table["end"][0]) == (0, 2)
    assert table["count"][0] == 2


def test_nothing_gives_nothing():
    assert summarise(Marks.none(), label_marks(Marks.none()))["time"].size == 0


def test_open_clusters_wait_for_the_next_batch():
    m = marks([(0, 1, 20, 30, 33), (0.5, 5.2, 25, 40, 40), (1, 2, 300, 400, 20)])
    finished, pending = split_finished(m, label_marks(m), 5.0)
    assert finished.tolist() == [False, False, True]
    assert pending.tolist() == [True, True, False]


def test_three_points_of_a_gaussian_give_its_top():
    for shift in (-0.4, 0.0, 0.31):
        before, peak, after = (50 * np.exp(-1.1 * (k - shift) ** 2) for k in (-1, 0, 1))
        assert peak_shift(
            np.array([before]), np.array([peak]), np.array([after])
        ) == pytest.approx(shift, abs=1e-9)
