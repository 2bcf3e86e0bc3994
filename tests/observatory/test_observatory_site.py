"""The written site: files, truth, faults; planted signals found by a matched filter."""

import csv
import itertools
import tracemalloc
from dataclasses import replace
from decimal import Decimal

import h5py
import numpy as np
import pytest
import scipy.fft

from dq.config import load_config
from dq.errors import InputError, OutputError
from dq.observatory import SiteSettings, make_site
from dq.observatory.channels import (
    AUXILIARY,
    DEAD,
    NOT_FINITE,
    STRAIN,
    UNSAFE,
    strain_seen,
)
from dq.observatory.families import Source
from dq.observatory.recording import (
    Fault,
    add_contributions,
    plateaus,
    sample_ns,
    stretches,
)
from dq.observatory.schedule import STRAIN_LOW_HZ, Contribution, plan_night
from dq.observatory.snr import NoiseModel
from dq.segments import parse_segments, to_ns

SETTINGS = SiteSettings(
    seed=11,
    duration_s=512,
    strain_file_s=200,
    saturations_per_hour=20,
    injections_per_hour=40,
)
NS = 1_000_000_000


@pytest.fixture(scope="module")
def site(tmp_path_factory):
    folder = tmp_path_factory.mktemp("observatory") / "site"
    steps = []
    path = make_site(folder, settings=SETTINGS, progress=lambda *s: steps.append(s))
    assert path == folder / "dq.toml"
    assert [s[0] for s in steps] == list(range(1, steps[-1][1] + 1))
    return folder


@pytest.fixture(scope="module")
def night():
    return plan_night(SETTINGS)


def table(path):
    with path.open(newline="") as file:
        return list(csv.DictReader(file))


def recorded(site, name):
    """All stretches of a channel as (GPS start in ns, rate, values), by time."""
    found = []
    for path in sorted((site / "raw").glob("*.h5")):
        with h5py.File(path) as file:

            def visit(where, item):
                if isinstance(item, h5py.Dataset) and where.split("/")[-1] == name:
                    start = Decimal(str(item.attrs["gps_start"]))
                    rate = float(item.attrs["sample_rate"])
                    found.append((int(start * NS), rate, item[:], item.attrs["unit"]))

            file.visititems(visit)
    return sorted(found, key=lambda f: f[0])


def strain_of(site):
    """Give the strain over the night, NaN where nothing is recorded."""
    out = np.full(SETTINGS.duration_s * 4096, np.nan)
    for start, rate, values, _ in recorded(site, STRAIN):
        first = round((start / NS - SETTINGS.start) * rate)
        out[first : first + len(values)] = values
    return out


def faults(site, kind):
    rows = [r for r in table(site / "truth" / "faults.csv") if r["kind"] == kind]
    return [(r["channel"], to_ns(r["gps_start"]), to_ns(r["gps_end"])) for r in rows]


def test_config_loads_and_names_what_is_there(site):
    config = load_config(site / "dq.toml")
    assert config.site.name == "Orrin Vale"
    assert config.site.strain == STRAIN
    assert config.vetoes.max_dead_time == 0.05
    for name in (config.data.channels, config.data.ready, config.data.injections):
        assert config.path(name).is_file()
    assert "invented" in (site / "README.txt").read_text()


def test_every_listed_channel_is_recorded_at_its_rate(site):
    rows = table(site / "channels.csv")
    assert [r["role"] for r in rows].count("strain") == 1
    assert len(rows) == 25
    assert all(r["quantity"] and r["unit"] and r["f_low_hz"] for r in rows)
    assert [r["channel"] for r in rows if r["safe"] == "no"] == [UNSAFE]
    for row in rows:
        parts = recorded(site, row["channel"])
        assert {p[1] for p in parts} == {float(row["sample_rate"])}, row["channel"]
        assert {p[3] for p in parts} == {row["unit"]}
        seconds = sum(len(p[2]) for p in parts) / float(row["sample_rate"])
        missing = SETTINGS.fault_length("gap_s") if row["channel"] == STRAIN else 0.0
        assert seconds == SETTINGS.duration_s - missing


def test_rates_and_storage_types_are_mixed():
    assert {c.rate for c in AUXILIARY} >= {32, 64, 128, 256, 512, 1024, 2048}
    assert {c.dtype for c in AUXILIARY} == {"int16", "float32", "float64"}
    assert {c.compressed for c in AUXILIARY} == {True, False}
    assert len(AUXILIARY) == 24
    assert len({c.name for c in AUXILIARY}) == 24


def test_stretches_abut_except_at_the_gap(site):
    for spec in AUXILIARY:
        parts = recorded(site, spec.name)
        for (start, rate, values, _), (after, *_) in itertools.pairwise(parts):
            assert start + round(len(values) / rate * NS) == after
    parts = recorded(site, STRAIN)
    assert len(parts) == 4
    steps = [
        (start + len(values) * NS // 4096, after)
        for (start, _, values, _), (after, *_) in itertools.pairwise(parts)
    ]
    assert [(a, b) for a, b in steps if a != b] == [
        (start, end) for _, start, end in faults(site, "gap")
    ]


def test_not_finite_stretches_are_exactly_where_the_truth_says(site):
    for channel, start, end in faults(site, "not_finite"):
        for first, rate, values, _ in recorded(site, channel):
            times = first + np.rint(np.arange(len(values)) * NS / rate).astype(int)
            inside = (times >= start) & (times < end)
            np.testing.assert_array_equal(np.isnan(values), inside)
    assert {c for c, *_ in faults(site, "not_finite")} == {STRAIN, NOT_FINITE}


def test_not_finite_strain_lies_in_ready_time(site):
    ready = parse_segments((site / "ready.txt").read_text())
    (start, end) = next(f[1:] for f in faults(site, "not_finite") if f[0] == STRAIN)
    assert ready.contains(np.array([start, end])).all()


def test_saturation_plateaus_are_exactly_at_the_rail(site):
    strain = strain_of(site)
    rail = SETTINGS.rail
    assert (np.nanmin(strain), np.nanmax(strain)) == (-rail, rail)
    planted = [f for f in faults(site, "saturation") if f[0] == STRAIN]
    assert len(planted) >= 4
    covered = np.zeros(len(strain), dtype=bool)
    longest = 0
    for _, start, end in planted:
        first = round((start / NS - SETTINGS.start) * 4096)
        stop = round((end / NS - SETTINGS.start) * 4096)
        part = strain[first:stop]
        assert len(part) >= 3
        assert np.all(part == part[0])
        assert abs(part[0]) == rail
        covered[first:stop] = True
        longest = max(longest, stop - first)
    assert longest >= 10
    # what touches the rail outside is too short to be a plateau
    rest = np.flatnonzero((np.abs(strain) == rail) & ~covered)
    assert len(rest) <= 2 * len(planted)


def test_dead_channel_is_constant(site):
    values = np.concatenate([p[2] for p in recorded(site, DEAD)])
    assert np.ptp(values) == 0


def test_injections_are_in_the_truth_and_end_at_their_time(site):
    injected = table(site / "injections.csv")
    truth = [
        r
        for r in table(site / "truth" / "transients.csv")
        if r["family"] == "test_signal"
    ]
    assert len(injected) == len(truth) >= 4
    for signal, row in zip(injected, truth, strict=True):
        assert signal["kind"] == "chirp"
        assert float(signal["snr"]) == pytest.approx(float(row["snr"]), abs=1e-3)
        late = float(signal["gps_time"]) - float(row["gps_time"])
        assert 0 < late < 0.3


def test_a_matched_filter_finds_every_event_with_its_snr(site, night):
    strain = strain_of(site)
    model = NoiseModel(strain_seen, sample_rate=4096, f_low_hz=STRAIN_LOW_HZ)
    truth = {t.event: t.measured.snr for t in night.transients}
    pulls = []
    for event, item in enumerate(night.contributions[STRAIN]):
        if item.amplitude > 1e-18 or item.source.cuts_s:
            continue
        first = int(np.ceil((item.time_s - item.source.before_s) * 4096))
        last = int((item.time_s + item.source.after_s) * 4096)
        time = np.arange(first, last) / 4096 - item.time_s
        template = item.amplitude * item.source.wave(time, 0.45 * 4096)
        found = filtered(strain, first, template, model)
        if found is None:
            continue
        output, optimal = (x / float(night.drift(item.time_s)) for x in found)
        # 16 s show the lines' Gaussians on a finer grid than the 8 s of the truth
        assert optimal == pytest.approx(truth[event], rel=5e-3)
        pulls.append(output - truth[event])
    pulls = np.array(pulls)
    assert len(pulls) > 30
    # a matched filter's output is its SNR plus a normal deviate
    assert abs(pulls.mean()) < 4 / np.sqrt(len(pulls))
    assert 0.7 < pulls.std() < 1.3


def filtered(strain, first, template, model):
    """Give (matched-filter output, optimal SNR) in units of the undrifted noise."""
    samples = 16 * 4096
    low = first + len(template) // 2 - samples // 2
    data = strain[max(low, 0) : low + samples]
    if low < 0 or len(data) < samples or not np.all(np.isfinite(data)):
        return None
    if np.abs(data).max() > 0.5 * SETTINGS.rail:
        return None
    ramp = np.clip(
        np.minimum(np.arange(samples), np.arange(samples)[::-1]) / 8192, 0, 1
    )
    placed = np.zeros(samples)
    placed[first - low : first - low + len(template)] = template
    weight = model.weight(samples)
    h = scipy.fft.rfft(placed) * weight
    d = scipy.fft.rfft(data * np.sin(0.5 * np.pi * ramp) ** 2) * weight
    norm = np.sqrt(np.vdot(h, h).real)
    scale = 2 / np.sqrt(4096 * samples)
    return scale * np.vdot(h, d).real / norm, scale * norm


def test_unsafe_channel_hears_the_strain(site, night):
    error = np.concatenate([p[2] for p in recorded(site, UNSAFE)]).astype(float)
    strain = strain_of(site)[::2]
    at = night.injections[0][0]
    first = int((at - 0.5) * 2048)
    a, b = error[first : first + 1024], strain[first : first + 1024]
    a, b = (np.fft.rfft((x - x.mean()) * np.hanning(1024)) for x in (a, b))
    band = slice(20, 100)
    coherence = np.abs(np.vdot(a[band], b[band])) / (
        np.linalg.norm(a[band]) * np.linalg.norm(b[band])
    )
    assert coherence > 0.9


def test_labels_are_near_the_truth_and_mostly_right(site):
    truth = table(site / "truth" / "transients.csv")
    times = np.array([float(r["gps_time"]) for r in truth])
    labels = table(site / "labels.csv")
    assert len(labels) > 20
    right = 0
    for label in labels:
        nearest = np.argmin(np.abs(times - float(label["gps_time"])))
        assert abs(times[nearest] - float(label["gps_time"])) < 0.0201
        right += truth[nearest]["family"] == label["family"]
    assert 0.8 < right / len(labels) <= 1.0
    assert {r["labeller"] for r in labels} == {"analyst-1", "analyst-2"}


def test_the_same_seed_gives_the_same_bytes_and_another_seed_others(
    site, tmp_path, tree_of
):
    again = tmp_path / "again"
    make_site(again, settings=SETTINGS)
    first, second = tree_of(site), tree_of(again)
    assert first == second
    other = tmp_path / "other"
    make_site(other, settings=replace(SETTINGS, seed=12))
    third = tree_of(other)
    assert set(third) == set(first)
    same = [n for n in first if n.endswith(".h5") and first[n] == third[n]]
    assert same == []
    assert third["truth/transients.csv"] != first["truth/transients.csv"]


def test_an_older_site_is_replaced_whole(tmp_path):
    small = {"gap_s": 0.0, "strain_nan_s": 0.0, "not_ready_s": 0.0}
    make_site(tmp_path, settings=SiteSettings(duration_s=256, **small))
    path = make_site(tmp_path, settings=SiteSettings(duration_s=128, **small))
    assert len(recorded(tmp_path, STRAIN)) == 1
    assert len(recorded(tmp_path, STRAIN)[0][2]) == 128 * 4096
    assert len(parse_segments((tmp_path / "ready.txt").read_text())) == 1
    assert path.is_file()


def test_a_folder_with_other_things_is_refused(tmp_path):
    (tmp_path / "raw").mkdir()
    (tmp_path / "raw" / "mine.h5").write_bytes(b"precious")
    with pytest.raises(InputError, match="no invented site; choose an empty folder"):
        make_site(tmp_path, duration_s=128)
    assert (tmp_path / "raw" / "mine.h5").read_bytes() == b"precious"


def test_a_folder_that_cannot_be_made_is_an_output_error(tmp_path):
    (tmp_path / "file").write_text("")
    with pytest.raises(OutputError, match="cannot write the site"):
        make_site(tmp_path / "file" / "site", duration_s=128)


def test_spare_channels_and_noise_level(tmp_path):
    quiet = SiteSettings(
        duration_s=128, spare_channels=2, rate_scale=0.0, own_glitch_scale=0.0
    )
    quiet = replace(quiet, injections_per_hour=0.0, saturations_per_hour=0.0)
    make_site(tmp_path / "one", settings=quiet)
    make_site(tmp_path / "two", settings=replace(quiet, noise_level=2.0))
    assert len(table(tmp_path / "one" / "channels.csv")) == 27
    assert len(recorded(tmp_path / "one", "OV-SPARE-0002")) == 1
    assert table(tmp_path / "one" / "truth" / "transients.csv") == []
    one, two = (np.nanstd(recorded(tmp_path / n, STRAIN)[0][2]) for n in ("one", "two"))
    assert two / one == pytest.approx(2.0, rel=0.05)


def test_contributions_are_sampled_at_their_exact_time():
    source = Source(lambda t, top: np.exp(-((t / 0.01) ** 2)), 0.05, 0.05)
    values = np.zeros(1000)
    add_contributions(values, sample_rate=1000, items=[Contribution(0.4, source, 2.0)])
    assert np.argmax(values) == 400
    assert values[400] == 2.0
    values = np.zeros(1000)
    items = [Contribution(0.99925, source, 1.0), Contribution(-0.02, source, 1.0)]
    add_contributions(values, sample_rate=1000, items=items)
    assert values[999] == pytest.approx(np.exp(-((0.00025 / 0.01) ** 2)))
    assert values[0] == pytest.approx(np.exp(-4.0))
    assert values[500] == 0.0


def test_plateaus_are_runs_of_three_or_more_at_either_rail():
    values = np.array([0, 5, 5, 5, 0, 5, 5, 1, -5, -5, -5, -5])
    found = plateaus(values, low=-5, high=5, channel="X")
    assert found == [Fault("X", "saturation", 1, 4), Fault("X", "saturation", 8, 12)]


def test_sample_times_are_rounded_to_the_nanosecond():
    assert sample_ns(1_420_000_037, 0, 4096) == 1_420_000_037 * NS
    assert sample_ns(10, 1, 4096) == 10 * NS + 244_141
    assert sample_ns(10, 4096 * 7, 4096) == 17 * NS


@pytest.mark.parametrize(
    ("gap", "expected"),
    [
        (None, [(0, 0, 40), (1, 40, 80), (2, 80, 100)]),
        ((50, 60), [(0, 0, 40), (1, 40, 50), (1, 60, 80), (2, 80, 100)]),
        ((30, 50), [(0, 0, 30), (1, 50, 80), (2, 80, 100)]),
        ((40, 80), [(0, 0, 40), (2, 80, 100)]),
        ((80, 100), [(0, 0, 40), (1, 40, 80)]),
    ],
)
def test_a_gap_is_left_out_of_the_files(gap, expected):
    gap = gap and Fault(STRAIN, "gap", *gap)
    assert list(stretches(100, 40, gap)) == expected


@pytest.mark.slow
def test_an_hour_stays_within_its_memory(tmp_path):
    tracemalloc.start()
    make_site(tmp_path / "hour")
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    assert peak < 1.5e9
