"""One channel end to end in memory: seams, block lengths, edges, faults, rates."""

import numpy as np
import pytest
from memory_channel import NS, MemoryChannel

from dq.config import parse_config
from dq.errors import ChannelError, NoDataError, PlanError
from dq.night.channel import analyse_channel
from dq.segments import Segments

GPS = 1_420_000_000
RATE = 512


def config(*, snr=5.5, **tiles):
    return parse_config(
        {
            "site": {"name": "Orrin Vale", "strain": "OV-STRAIN"},
            "data": {"files": ["x.h5"], "channels": "channels.csv"},
            "tiles": tiles,
            "transients": {"snr_threshold": snr},
        }
    )


def burst(t, t0, f0, q_tile, rho, sigma=1.0):
    """Make a burst of SNR rho in white noise of standard deviation sigma."""
    tau = q_tile / (2 * np.pi * f0)
    h = np.sin(2 * np.pi * f0 * (t - t0) + 0.7) * np.exp(-(((t - t0) / tau) ** 2))
    return h * rho * sigma / np.sqrt(np.sum(h**2))


def make(rng, seconds=400, bursts=(), rate=RATE, start=GPS):
    x = rng.standard_normal(int(seconds * rate))
    t = start + np.arange(len(x)) / rate
    for t0, f0, q, rho in bursts:
        near = np.abs(t - t0) < 4
        x[near] += burst(t[near], t0, f0, q, rho)
    return MemoryChannel("OV-STRAIN", rate, start * NS, x)


def analyse(data, *, start=None, end=None, ready=None, settings=None, **options):
    low, high = data.recorded.starts[0], data.recorded.ends[-1]
    return analyse_channel(
        data,
        ready=ready,
        start_ns=int(low if start is None else start * NS),
        end_ns=int(high if end is None else end * NS),
        config=settings or config(),
        **options,
    )


def near(table, t0, width=0.2):
    return table[(table.gps_start < t0 + width) & (table.gps_end > t0 - width)]


SEAMS = [GPS - GPS % 64 + 64 * k for k in range(2, 6)]


def test_a_burst_centred_on_every_seam_is_found_once(rng):
    data = make(rng, bursts=[(s, 40.0 + 30 * i, 8, 15) for i, s in enumerate(SEAMS)])
    result = analyse(data)
    for i, seam in enumerate(SEAMS):
        found = near(result.transients, seam)
        assert len(found) == 1
        assert found.snr.iloc[0] == pytest.approx(15, rel=0.2)
        sigma_t = 8 / (4 * np.pi * (40 + 30 * i))
        assert abs(found.gps_time.iloc[0] - seam) < 0.5 * sigma_t


def test_every_second_is_accounted_for_once(rng):
    data = make(rng)
    result = analyse(data)
    pad = result.unjudged.total_s / 2
    assert len(result.analysed) == 1
    assert result.analysed.total_s == pytest.approx(400 - 2 * pad)
    assert not result.missing
    assert (result.analysed & result.unjudged).total_ns == 0
    assert (result.analysed | result.unjudged) == data.recorded
    # no sample is read twice
    assert data.samples_read == len(data.values)


def test_other_block_lengths_give_the_same_transients(rng):
    times = GPS + 20 + 37 * np.arange(10) + rng.random(10)
    f0, q = 20 * 8 ** rng.random(10), 5 + 40 * rng.random(10)
    bursts = list(zip(times, f0, q, 6.5 + np.arange(10), strict=True))
    data = make(rng, bursts=bursts)
    results = {b: analyse(data, settings=config(block_s=b)) for b in (32, 64, 128)}
    reference = results[64].transients
    for b in (32, 128):
        other = results[b].transients
        for one, two in ((reference, other), (other, reference)):
            for _, row in one[one.snr >= 6.0].iterrows():
                found = two[
                    (two.gps_start < row.gps_end) & (two.gps_end > row.gps_start)
                ]
                assert len(found) == 1
                # the time grid differs: a tile may lose d^2 / 4 = 6.7 % of energy
                assert found.snr.iloc[0] == pytest.approx(row.snr, rel=0.08)
                # near threshold noise moves the peak by about sigma_t / rho between
                # planes of different Q
                sigma_t = row.q / (4 * np.pi * row.frequency_hz)
                assert abs(found.gps_time.iloc[0] - row.gps_time) < sigma_t


def test_a_second_does_not_depend_on_the_range_asked_for(rng):
    data = make(rng, seconds=1500, bursts=[(GPS + 60 * k, 70, 9, 8) for k in range(25)])
    whole = analyse(data)
    part = analyse(data, start=GPS + 500, end=GPS + 1111)
    inside = whole.transients.gps_time.between(GPS + 501, GPS + 1110)
    also = part.transients.gps_time.between(GPS + 501, GPS + 1110)
    a = whole.transients[inside].reset_index(drop=True)
    b = part.transients[also].reset_index(drop=True)
    assert len(a) > 8
    assert a.equals(b)
    # data beyond the range exist: no settling time is lost at its ends
    assert part.analysed.total_s == pytest.approx(611)


def test_gap_and_nan_split_and_are_accounted_for(rng):
    data = make(rng)
    data.values[100 * RATE : 120 * RATE] = np.nan
    ready = Segments.from_seconds([GPS, GPS + 250], [GPS + 200, GPS + 400])
    result = analyse(data, ready=ready)
    assert result.missing == Segments.from_seconds([GPS + 100], [GPS + 120])
    assert result.faults["not_finite"] == result.missing
    wanted = ready
    assert (result.analysed | result.unjudged | result.missing) == wanted
    assert len(result.analysed) == 3
    # nothing is raised by the borders themselves
    assert (result.transients.snr > 8).sum() == 0


def test_settling_edges_are_cut_even_beside_huge_values(rng):
    data = make(rng)
    data.values[200 * RATE : 201 * RATE] += 1e7
    ready = Segments.from_seconds([GPS, GPS + 201], [GPS + 200, GPS + 400])
    result = analyse(data, ready=ready)
    assert (result.transients.snr > 8).sum() == 0


def test_a_very_loud_transient_does_not_blind_its_neighbourhood(rng):
    t0 = GPS + 200.0
    bursts = [(t0, 60, 8, 1e4), (t0 + 4, 150, 8, 10), (t0 - 4, 90, 8, 10)]
    quiet = analyse(make(np.random.default_rng(5), bursts=bursts[1:])).transients
    loud = analyse(make(np.random.default_rng(5), bursts=bursts)).transients
    main = near(loud, t0)
    assert main.snr.max() == pytest.approx(1e4, rel=0.1)
    for t in (t0 - 4, t0 + 4):
        one, two = near(quiet, t), near(loud, t)
        assert len(one) == len(two) == 1
        assert two.snr.iloc[0] == pytest.approx(one.snr.iloc[0], rel=0.03)


def test_faults_are_found_at_their_exact_times(rng):
    data = make(rng)
    data.values[50 * RATE : 50 * RATE + 200] = data.values[50 * RATE]
    data.values[300 * RATE + 7 : 300 * RATE + 107] = 0.0
    t = np.arange(RATE) / RATE
    wave = 60 * np.sin(2 * np.pi * 11 * t)
    part = slice(150 * RATE, 151 * RATE)
    data.values[part] = np.clip(data.values[part] + wave, -40, 40)
    faults = analyse(data).faults
    ns = NS // RATE
    at = GPS * NS
    flat = [(at + 50 * NS, at + 50 * NS + 200 * ns)]
    assert faults["flat_line"] == Segments.of(flat)
    drop = at + 300 * NS + 7 * NS // RATE
    assert faults["dropout"].starts.tolist() == [drop]
    assert abs(faults["dropout"].total_s - 100 / RATE) < 1e-8
    rail = np.abs(data.values[part]) == 40
    edges = np.flatnonzero(np.diff(rail, prepend=False, append=False))
    length = edges[1::2] - edges[::2]
    assert faults["saturation"].total_s == pytest.approx(
        length[length >= 3].sum() / RATE, abs=1e-6
    )


def test_level_steps_are_followed(rng):
    data = make(rng, seconds=1200)
    data.values[600 * RATE :] *= 3
    result = analyse(data)
    table = result.transients
    away = np.abs(table.gps_time - GPS - 600) > 130
    # three times the level without following would raise hundreds of transients
    assert (table[away].snr > 6.5).sum() <= 1


def test_nothing_but_noise_gives_few_transients(rng):
    table = analyse(make(rng, seconds=2000)).transients
    assert (table.snr > 7).sum() == 0
    assert len(table) < 20


@pytest.mark.parametrize("rate", [16, 32, 50, 100, 256, 2048, 16384, 65536])
def test_any_rate_is_searched_in_the_band_it_carries(rate):
    rng = np.random.default_rng(rate)
    seconds = 150 if rate < 10_000 else 80
    f0 = min(rate / 6, 1500.0)
    data = make(rng, seconds, [(GPS + 50.3, f0, 8, 20)], rate=rate)
    result = analyse(data)
    assert result.f_high_hz < rate / 2
    assert result.f_low_hz <= 1.2 * min(max(rate / 50, 1), 10)
    found = near(result.transients, GPS + 50.3)
    assert len(found) == 1
    assert found.snr.iloc[0] == pytest.approx(20, rel=0.25)
    assert found.frequency_hz.iloc[0] == pytest.approx(f0, rel=0.15)


def test_amplitude_is_the_planted_root_sum_square(rng):
    data = make(rng, bursts=[(GPS + 100, 120, 9, 40), (GPS + 300, 60, 20, 60)])
    table = analyse(data).transients
    for t0, rho in ((GPS + 100, 40), (GPS + 300, 60)):
        # rho^2 = 2 h_rss^2 / S with S = 2 / rate
        truth = rho * np.sqrt(2 / RATE / 2)
        assert near(table, t0).amplitude.iloc[0] == pytest.approx(truth, rel=0.1)


def test_short_stretches_are_unjudged_not_clean(rng):
    data = make(rng, seconds=12)
    result = analyse(data)
    assert not result.analysed
    assert result.unjudged == data.recorded
    assert len(result.transients) == 0


def test_dead_channel_is_refused_by_name():
    data = MemoryChannel("OV-DEAD", RATE, GPS * NS, np.full(200 * RATE, 3.5))
    with pytest.raises(ChannelError, match=r"OV-DEAD.*constant at 3\.5"):
        analyse(data)


def test_no_data_in_the_range_is_said(rng):
    data = make(rng, seconds=50)
    with pytest.raises(NoDataError, match="OV-STRAIN"):
        analyse(data, start=GPS + 100, end=GPS + 200)


def test_band_beyond_the_rate_is_refused(rng):
    with pytest.raises(PlanError, match="lower f_low_hz"):
        analyse(make(rng, seconds=50), f_low_hz=400.0)
