"""Rows of activity: the ladder's law, a slow twin, the running median."""

import numpy as np
import pytest

from dq.motion import Cells, active_rows, block_reference
from dq.motion.activity import REFERENCE_BLOCK_S

LADDER = [2.0, 3.0, 4.5, 10.0]


def slow_rows(number, level, cell_s):
    """Give (start, end, peak, peak time) of rows, cell by cell."""
    span = max(1.0, cell_s)
    rows, before = [], None
    for k, value in zip(number.tolist(), level.tolist(), strict=True):
        step = sum(value >= bound for bound in LADDER)
        if step == 0:
            before = None
            continue
        second = int(np.floor(k * cell_s / span))
        if before == (k - 1, step, second):
            rows[-1].append((k, value))
        else:
            rows.append([(k, value)])
        before = (k, step, second)
    out = []
    for row in rows:
        peak = max(value for _, value in row)
        at = next(k for k, value in row if value == peak)
        end = (row[-1][0] + 1) * cell_s
        out.append((row[0][0] * cell_s, end, peak, (at + 0.5) * cell_s))
    return out


@pytest.mark.parametrize("cell_s", [0.125, 0.5, 1.0, 4.0])
def test_rows_equal_their_slow_twin(rng, cell_s):
    number = np.cumsum(rng.choice([1, 1, 1, 1, 7], 4000)) + 10_000_000
    level = np.round(np.exp(rng.standard_normal(4000)), 1)
    table = active_rows(Cells(number, level, cell_s), amplitude=level, ladder=LADDER)
    slow = slow_rows(number, level, cell_s)
    assert len(slow) > 200
    columns = ["gps_start", "gps_end", "snr", "gps_time"]
    np.testing.assert_array_equal(table[columns].to_numpy(), np.array(slow))
    assert np.array_equal(table["amplitude"], table["snr"])


def test_at_each_step_the_rows_cover_exactly_the_time_above_it(rng):
    number, level = np.arange(5000), np.exp(1.2 * rng.standard_normal(5000))
    table = active_rows(Cells(number, level, 0.125), amplitude=level, ladder=LADDER)
    for bound in LADDER:
        covered = np.zeros(5000, dtype=bool)
        for row in table[table["snr"] >= bound].itertuples():
            covered[round(row.gps_start / 0.125) : round(row.gps_end / 0.125)] = True
        assert np.array_equal(covered, level >= bound)


def test_no_activity_gives_no_rows():
    for level in (np.zeros(0), np.ones(9)):
        cells = Cells(np.arange(len(level)), level, 1.0)
        assert len(active_rows(cells, amplitude=level, ladder=LADDER)) == 0


def test_the_reference_is_the_median_of_the_blocks_around(rng):
    per_block = int(REFERENCE_BLOCK_S)
    number = np.arange(3 * per_block + 100, 12 * per_block)
    number = number[(number < 5 * per_block) | (number > 6 * per_block + 7)]
    level = rng.random(len(number)) + number / per_block
    found = block_reference(Cells(number, level, 1.0), least=10)
    block = number // per_block
    for k in np.unique(block):
        part = np.sort(level[(np.abs(block - k) <= 2) & (number % 2 == 0)])
        assert np.all(found[block == k] == part[len(part) // 2])


def test_a_loud_third_does_not_move_the_reference(rng):
    number = np.arange(8192)
    level = 1.0 + 0.01 * rng.standard_normal(8192)
    level[1000:2500] = 50.0
    found = block_reference(Cells(number, level, 1.0), least=10)
    # half of the first blocks is loud, so there the median lies at the noise's top
    np.testing.assert_allclose(found, 1.0, atol=0.03)


def test_too_few_levels_give_no_reference():
    cells = Cells(np.arange(40), np.ones(40), 1.0)
    assert np.all(np.isnan(block_reference(cells, least=41)))
    assert np.all(block_reference(cells, least=40) == 1.0)
    assert len(block_reference(Cells(np.arange(0), np.ones(0), 1.0), least=1)) == 0
