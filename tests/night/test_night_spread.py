"""Spread disturbances through the channel's run: seams, rarity, loud rows untouched."""

import numpy as np
import pytest
from memory_channel import NS, MemoryChannel

from dq.config import parse_config
from dq.night.channel import analyse_channel

GPS, RATE, SECONDS = 1_420_000_000 - 1_420_000_000 % 512, 1024, 1536
#: On and off the seams of blocks (64 s) and of batches (512 s at 1024 Hz and more).
TIMES_S = (100.3, 192.0, 320.0, 411.7, 512.0, 600.2, 704.0, 833.1, 1024.0, 1200.4)
RHO = 15.0


def analyse(x, snr=5.5):
    data = MemoryChannel("OV-STRAIN", RATE, GPS * NS, x)
    config = parse_config(
        {
            "site": {"name": "Orrin Vale", "strain": "OV-STRAIN"},
            "data": {"files": ["x.h5"], "channels": "channels.csv"},
            "transients": {"snr_threshold": snr},
        }
    )
    return analyse_channel(
        data, ready=None, start_ns=GPS * NS, end_ns=(GPS + SECONDS) * NS, config=config
    ).transients


def sweep(rho, seconds=0.6, rate=650.0):
    """Give a linear sweep from 55 to 445 Hz of an optimal SNR in white noise."""
    t = np.arange(int(seconds * RATE)) / RATE - seconds / 2
    wave = np.cos(2 * np.pi * (250 * t + 0.5 * rate * t**2))
    wave *= np.cos(np.pi * t / seconds) ** 0.5
    return rho * wave / np.sqrt(np.sum(wave**2))


@pytest.fixture(scope="module")
def noise():
    return np.random.default_rng(11).standard_normal(SECONDS * RATE)


@pytest.fixture(scope="module")
def table(noise):
    x = noise.copy()
    wave = sweep(RHO)
    for t0 in TIMES_S:
        first = int((t0 - 0.3) * RATE)
        x[first : first + len(wave)] += wave
    return analyse(x)


def rows_near(table, t0):
    start, end = table.gps_start - GPS, table.gps_end - GPS
    return table[(start < t0 + 0.3) & (end > t0 - 0.3)]


def test_sweeps_are_found_also_on_seams_and_their_energy_is_summed(table):
    best = [rows_near(table, t0).cluster_snr.max() for t0 in TIMES_S]
    assert np.all(np.array(best) >= 5.5)
    summed = np.array([rows_near(table, t0).summed_snr.max() for t0 in TIMES_S])
    assert np.median(summed) == pytest.approx(RHO, rel=0.1)
    # what lies on a seam is summed from both sides
    on_seam = np.array(TIMES_S) % 64 == 0
    assert on_seam.sum() == 5
    assert np.median(summed[on_seam]) == pytest.approx(RHO, rel=0.15)
    # the loudest tile holds a part only
    loudest = [rows_near(table, t0).snr.max() for t0 in TIMES_S]
    assert np.median(loudest) < 0.6 * RHO


def test_every_row_is_as_rare_as_the_threshold(table, noise):
    for found, snr in ((table, 5.5), (analyse(noise, 4.8), 4.8)):
        # sharpened peaks lie above the plan's tile: none is below its threshold
        assert np.all((found.snr >= snr) | (found.cluster_snr >= snr))
        assert (found.snr < snr).any()
        assert np.all(found.tile_count >= 1)
        assert np.all(found.summed_snr > 0)


def test_noise_raises_no_more_by_sums_than_by_tiles(noise):
    """At 4.8 tiles raise hundreds an hour here: enough to compare."""
    found = analyse(noise, 4.8)
    tiles, sums = (found.snr >= 4.8).sum(), (found.cluster_snr >= 4.8).sum()
    assert tiles > 50
    assert sums < 1.5 * tiles


def test_tiles_above_threshold_are_gathered_as_if_there_were_no_others(
    table, noise, monkeypatch
):
    import dq.transients.search as search

    x = noise.copy()
    wave = sweep(RHO)
    for t0 in TIMES_S:
        first = int((t0 - 0.3) * RATE)
        x[first : first + len(wave)] += wave
    monkeypatch.setattr(search, "BRIGHT", 1e9)
    plain = analyse(x)
    assert len(plain) < len(table)
    columns = ["gps_time", "gps_start", "gps_end", "frequency_hz", "snr", "tile_count"]
    both = plain[columns].merge(table[columns], how="left", indicator=True)
    assert (both["_merge"] == "both").all()
