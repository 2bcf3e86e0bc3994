"""Data faults at their exact samples, and none in honest data."""

import numpy as np
import pytest

from dq.conditioning import classify, equal_runs


def kinds_of(x):
    """Give (kind, first, length) of every fault."""
    runs = equal_runs(x)
    names = classify(
        runs.value, runs.flat, runs.plateau, lowest=x.min(), highest=x.max()
    )
    return [
        (str(n), int(a), int(length))
        for n, a, length in zip(names, runs.first, runs.length, strict=True)
        if n
    ]


def test_flat_line_and_dropout_at_exact_samples(rng):
    x = rng.standard_normal(100_000)
    x[2000:2300] = x[2000]
    x[50_000:50_037] = 0.0
    assert kinds_of(x) == [("flat_line", 2000, 300), ("dropout", 50_000, 37)]


def test_clipped_wave_is_saturation_at_every_crest(rng):
    x = rng.standard_normal(50_000)
    wave = 100 * np.sin(2 * np.pi * np.arange(1000) / 50)
    x[10_000:11_000] += wave
    clipped = np.clip(x, -40, 40)
    found = kinds_of(clipped)
    assert {k for k, _, _ in found} == {"saturation"}
    covered = np.zeros(len(x), bool)
    for _, first, length in found:
        covered[first : first + length] = True
    truth = np.abs(x) >= 40
    # nothing outside the rail; crests cut for at least three samples are all found
    assert not np.any(covered & ~truth)
    assert np.count_nonzero(covered) > 0.95 * np.count_nonzero(truth)


@pytest.mark.parametrize("scale", [0.3, 1.0, 5.0, 300.0])
def test_coarsely_digitised_noise_is_no_fault(rng, scale):
    for _ in range(5):
        x = np.round(scale * rng.standard_normal(300_000))
        assert kinds_of(x) == []


def test_slow_coarse_signal_is_no_fault(rng):
    x = np.round(3 * np.sin(np.arange(200_000) / 3000) + 0.2 * rng.standard_normal())
    x = x + np.round(0.6 * rng.standard_normal(200_000))
    assert kinds_of(x) == []


def test_a_fault_stands_out_of_coarse_noise(rng):
    x = np.round(2 * rng.standard_normal(200_000))
    x[70_000:70_400] = 3.0
    found = kinds_of(x)
    assert [k for k, _, _ in found] == ["flat_line"]
    _, first, length = found[0]
    # a neighbour that happens to have the same value cannot be told from the fault
    assert first <= 70_000 <= first + 3
    assert 400 <= length <= 406


def test_noise_without_repetition_has_no_runs(rng):
    assert len(equal_runs(rng.standard_normal(1000)).first) == 0
