"""Borders: short stretches, missing low rows, lines, level steps, a very loud burst."""

import numpy as np
import pytest
from memory_channel import NS, MemoryChannel

from dq.config import parse_config
from dq.night.blocks import MAX_SETTLING_S, plan_blocks
from dq.night.channel import analyse_channel

GPS, RATE = 1_420_000_000, 512


def config(**tiles):
    return parse_config(
        {
            "site": {"name": "Orrin Vale", "strain": "OV-STRAIN"},
            "data": {"files": ["x.h5"], "channels": "channels.csv"},
            "tiles": tiles,
        }
    )


def add_burst(x, t0, f0, q, rho, rate=RATE, sigma=1.0):
    """Add a burst of SNR rho in white noise of a standard deviation."""
    t = np.arange(len(x)) / rate - t0
    tau = q / (2 * np.pi * f0)
    near = np.abs(t) < 8 * tau
    h = np.sin(2 * np.pi * f0 * t[near] + 0.7) * np.exp(-((t[near] / tau) ** 2))
    x[near] += h * rho * sigma / np.sqrt(np.sum(h**2))


def analyse(x, *, rate=RATE, settings=None, **options):
    data = MemoryChannel("OV-STRAIN", rate, GPS * NS, x)
    return analyse_channel(
        data,
        ready=None,
        start_ns=GPS * NS,
        end_ns=int(data.recorded.ends[-1]),
        config=settings or config(),
        **options,
    )


def near(table, t0, width=0.1):
    t0 = t0 + GPS
    return table[(table.gps_start < t0 + width) & (table.gps_end > t0 - width)]


def settling(rate=RATE):
    """Give the stated settling time of filter and tile, s."""
    return plan_blocks(rate, config(), 10.0, None).pad_ns / NS


def test_stretches_of_any_length_between_gaps_are_judged_inside_their_edges(rng):
    pad = settling()
    lengths = (10, 17, 21, 33, 50, 64, 90)
    x, spans, at = [], [], 0.0
    for length in lengths:
        part = rng.standard_normal(length * RATE)
        if length > 2 * pad:
            add_burst(part, length / 2, 80.0, 8, 15)
        x += [part, np.full(7 * RATE, np.nan)]
        spans.append((at, at + length))
        at += length + 7
    result = analyse(np.concatenate(x))
    for low, high in spans:
        judged = result.analysed.clip((GPS + int(low)) * NS, (GPS + int(high)) * NS)
        seconds = sum(e - s for s, e in judged) / NS
        assert seconds == pytest.approx(max(high - low - 2 * pad, 0.0))
        if high - low > 2 * pad:
            found = near(result.transients, (low + high) / 2)
            assert len(found) == 1
            assert found.snr.iloc[0] == pytest.approx(15, rel=0.25)
    # the edges themselves raise nothing
    assert (result.transients.snr > 7).sum() == sum(n > 2 * pad for n in lengths)
    assert result.analysed.total_s + result.unjudged.total_s == sum(lengths)


def test_where_low_rows_do_not_fit_the_band_searched_is_said(rng):
    x = rng.standard_normal(16 * 600)
    result = analyse(x, rate=16, f_low_hz=0.1)
    text = next(n for n in result.notes if n.startswith("searched from"))
    assert f"not 0.1 Hz: lower tiles would need more than {MAX_SETTLING_S:g} s" in text
    stated = float(text.split()[2])
    assert stated == pytest.approx(result.f_low_hz, rel=0.01)
    assert result.f_low_hz > 0.15
    # and where they fit nothing is said
    assert analyse(rng.standard_normal(RATE * 100)).notes == []


@pytest.mark.parametrize("height", [30.0, 1000.0, 10_000.0])
def test_a_strong_line_raises_nothing_and_hides_nothing_beside_it(rng, height):
    t = np.arange(1000 * RATE) / RATE
    x = rng.standard_normal(len(t))
    # amplitudes of 340, 11 000 and 110 000 times the noise of 1 Hz; one line sways
    x += height * np.sin(2 * np.pi * 60 * t)
    x += height * (1 + 0.02 * np.sin(t / 570)) * np.sin(2 * np.pi * 147.3 * t)
    times = 60.0 + 80 * np.arange(11) + 0.3
    for k, t0 in enumerate(times):
        add_burst(x, t0, 75.0 if k % 2 else 100.0, 12, 15)
    table = analyse(x).transients
    for t0 in times:
        found = near(table, t0)
        assert len(found) == 1
        assert found.snr.iloc[0] == pytest.approx(15, rel=0.25)
    assert (table.snr > 7).sum() == len(times)


@pytest.mark.parametrize("factor", [3.0, 1 / 3])
@pytest.mark.parametrize("place", [800, 770, 829])
def test_a_level_step_raises_nothing_beyond_its_block(factor, place):
    """The block that holds the step has one spectrum for both levels, others do not."""
    block = config().tiles.block_s
    x = np.random.default_rng(place).standard_normal(1600 * RATE)
    x[place * RATE :] *= factor
    table = analyse(x).transients
    off = table.gps_time.to_numpy() - GPS - place
    # a tile of the louder side reaches half a second into the quieter
    assert (table.snr[np.abs(off) > block + 0.5] > 6.5).sum() == 0
    assert (table.snr[off * np.sign(factor - 1) < -0.5] > 6.5).sum() == 0


@pytest.fixture(scope="module")
def around_a_loud_burst():
    """Give bursts of SNR 10 around a place, found without and with a huge one there."""
    offsets = (-5.0, -3.0, -2.0, -1.0, 1.0, 2.0, 3.0, 5.0)
    tables = []
    for loud in (0.0, 1e4):
        x = np.random.default_rng(5).standard_normal(400 * RATE)
        for k, offset in enumerate(offsets):
            add_burst(x, 200.0 + offset, (90.0, 150.0, 45.0)[k % 3], 8, 10)
        # and quiet ones all over the same block and the ones beside it
        for t0 in np.arange(100.5, 300, 10):
            if abs(t0 - 200) > 8:
                add_burst(x, t0, 120.0, 10, 9)
        if loud:
            add_burst(x, 200.0, 60.0, 8, loud)
        tables.append(analyse(x).transients)
    return offsets, tables


def test_a_very_loud_burst_blinds_no_longer_than_it_lasts_and_settles(
    around_a_loud_burst,
):
    offsets, (quiet, loud) = around_a_loud_burst
    main = loud.loc[loud.snr.idxmax()]
    assert main.snr == pytest.approx(1e4, rel=0.1)
    blind_to = main.gps_end - GPS - 200
    blind_from = main.gps_start - GPS - 200
    # the whitening filter ends 2 s from the burst; its tiles add their own length
    assert -settling() < blind_from
    assert blind_to < settling()
    for offset in offsets:
        one, two = near(quiet, 200 + offset), near(loud, 200 + offset)
        assert len(one) >= 1
        if not blind_from - 0.3 < offset < blind_to + 0.3:
            assert len(two) == 1
            assert two.snr.iloc[0] == pytest.approx(one.snr.max(), rel=0.1)


def test_a_very_loud_burst_does_not_bias_the_spectrum_of_its_block(
    around_a_loud_burst,
):
    _, (quiet, loud) = around_a_loud_burst
    ratios = []
    for t0 in np.arange(100.5, 300, 10):
        if abs(t0 - 200) > 8:
            one, two = near(quiet, t0), near(loud, t0)
            assert len(one) == len(two) == 1
            ratios.append(two.snr.iloc[0] / one.snr.iloc[0])
    assert np.max(np.abs(np.log(ratios))) < 0.05
    assert np.mean(ratios) == pytest.approx(1, abs=0.01)
