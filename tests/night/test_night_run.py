"""The night: what it writes, resumes, leaves out, refuses."""

import csv
import json
from concurrent.futures.process import BrokenProcessPool

import pytest
from small_site import SITE_BURSTS, SITE_SECONDS, SITE_START

from dq.config import load_config
from dq.errors import DqError, NoDataError, OutputError
from dq.night import report_again, run_night, veto_again

RANGE = {"start": SITE_START, "end": SITE_START + SITE_SECONDS}

#: What may differ between two runs of the same night: when and how it ran.
RUN_ONLY = ("run.log", "lock", "state")


def tables(tree):
    return {
        name: data
        for name, data in tree.items()
        if not name.startswith(RUN_ONLY) and data is not None
    }


def night(config, out, **options):
    return run_night(load_config(config), out=out, **{**RANGE, "jobs": 2, **options})


@pytest.fixture
def count(monkeypatch):
    """Count the channels that are analysed, by name."""
    from dq.night import channel

    real, seen = channel.analyse_channel, []

    def counting(data, **options):
        seen.append(data.name)
        return real(data, **options)

    monkeypatch.setattr(channel, "analyse_channel", counting)
    return seen


def summary_of(out):
    return json.loads((out / "summary.json").read_text())


def test_a_night_writes_every_file_and_names_the_witness(small_site, tmp_path, here):
    out = tmp_path / "night"
    outcome = night(small_site(), out)
    assert outcome.exit_code == 3
    assert list(outcome.left_out) == ["OV-DEAD"]
    names = {p.name for p in out.iterdir()}
    assert names >= {
        "transients.h5",
        "strain_transients.csv",
        "witnesses.csv",
        "vetoes.csv",
        "veto_cost.csv",
        "segments",
        "quality_mask.h5",
        "summary.json",
        "index.html",
        "manifest.json",
        "run.log",
        "channels.csv",
        "coverage.csv",
    }
    found = (out / "strain_transients.csv").read_text().splitlines()
    assert len([line for line in found if "OV-A" in line]) == len(SITE_BURSTS)
    summary = summary_of(out)
    assert summary["channels"]["left_out"].keys() == {"OV-DEAD"}
    assert 0 < summary["analysed_s"] < SITE_SECONDS
    assert summary["dead_time_fraction"] <= 0.05


def test_without_anything_left_out_the_code_is_0(small_site, tmp_path, here):
    outcome = night(small_site(dead=False), tmp_path / "night")
    assert outcome.exit_code == 0
    assert outcome.left_out == {}


def test_a_gap_is_missing_and_no_fault(small_site, tmp_path, here):
    config = small_site(dead=False, gap=(100, 110))
    outcome = night(config, tmp_path / "night")
    assert outcome.exit_code == 0
    lines = (tmp_path / "night" / "coverage.csv").read_text()
    assert f"OV-STRAIN,missing,{SITE_START + 100},{SITE_START + 110}" in lines


def test_nan_in_ready_time_is_left_out(small_site, tmp_path, here):
    config = small_site(dead=False, nan=("OV-STRAIN", 100, 101))
    outcome = night(config, tmp_path / "night")
    assert outcome.exit_code == 3
    assert outcome.faulty == {"OV-STRAIN": 1.0}
    lines = (tmp_path / "night" / "coverage.csv").read_text()
    assert f"OV-STRAIN,not_finite,{SITE_START + 100},{SITE_START + 101}" in lines


def test_a_finished_night_has_nothing_to_do(small_site, tmp_path, here, count, tree_of):
    config, out = small_site(), tmp_path / "night"
    first = night(config, out)
    before = tables(tree_of(out))
    count.clear()
    again = night(config, out)
    assert again.nothing_to_do
    assert again.exit_code == first.exit_code == 3
    assert again.left_out == first.left_out
    assert count == []
    assert tables(tree_of(out)) == before


def test_a_lost_file_is_written_again(small_site, tmp_path, here, tree_of):
    config, out = small_site(dead=False), tmp_path / "night"
    night(config, out)
    before = tables(tree_of(out))
    (out / "vetoes.csv").unlink()
    assert not night(config, out).nothing_to_do
    assert tables(tree_of(out)) == before


def test_changed_settings_recompute_what_is_affected(small_site, tmp_path, here, count):
    config, out = small_site(dead=False), tmp_path / "night"
    night(config, out)
    text = config.read_text()
    count.clear()
    config.write_text(text + "[vetoes]\nmax_dead_time = 0.01\n")
    assert not night(config, out).nothing_to_do
    assert count == []
    config.write_text(text + "[transients]\nsnr_threshold = 6.5\n")
    night(config, out)
    assert sorted(count) == ["OV-A", "OV-B", "OV-STRAIN"]
    count.clear()
    listing = config.parent / "channels.csv"
    listing.write_text(
        "channel,role,f_low_hz\nOV-STRAIN,strain,\nOV-A,auxiliary,\nOV-B,auxiliary,8\n"
    )
    night(config, out)
    assert count == ["OV-B"]


def test_a_stopped_night_resumes(small_site, tmp_path, here, count, tree_of):
    config = small_site()
    night(config, tmp_path / "whole")
    done = []

    def stop(number, total, what):
        done.append(what)
        if len(done) == 2:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        night(config, tmp_path / "parts", progress=stop, jobs=1)
    count.clear()
    night(config, tmp_path / "parts")
    assert not set(count) & set(done)
    whole, parts = tree_of(tmp_path / "whole"), tree_of(tmp_path / "parts")
    assert tables(parts) == tables(whole)


def test_an_unexpected_error_costs_one_channel(small_site, tmp_path, here, monkeypatch):
    from dq.night import channel

    real = channel.analyse_channel

    def break_one(data, **options):
        if data.name == "OV-A":
            raise MemoryError("cannot allocate 9 GiB")
        return real(data, **options)

    monkeypatch.setattr(channel, "analyse_channel", break_one)
    outcome = night(small_site(dead=False), tmp_path / "night")
    assert outcome.exit_code == 3
    assert outcome.left_out == {"OV-A": "unexpected MemoryError: cannot allocate 9 GiB"}


def test_a_listed_channel_without_data_is_left_out(small_site, tmp_path, here):
    config = small_site(dead=False)
    listing = config.parent / "channels.csv"
    listing.write_text(listing.read_text() + "OV-GONE,auxiliary\n")
    outcome = night(config, tmp_path / "night")
    assert outcome.exit_code == 3
    assert "none of the data files" in outcome.left_out["OV-GONE"]


def test_an_unreadable_file_is_left_out(small_site, tmp_path, here):
    config = small_site(dead=False)
    (config.parent / "raw" / "b.h5").write_bytes(b"this is no HDF5 file")
    outcome = night(config, tmp_path / "night")
    assert outcome.exit_code == 3
    assert any("b.h5" in name for name in outcome.left_out)


def test_a_killed_worker_ends_the_run_in_one_line(small_site, tmp_path, monkeypatch):
    import contextlib

    from dq.night import run

    class Dying:
        def submit(self, *_args):
            raise BrokenProcessPool("killed")

    @contextlib.contextmanager
    def make_pool(jobs):
        yield Dying()

    monkeypatch.setattr(run, "make_pool", make_pool)
    with pytest.raises(OutputError, match="run the same command to resume") as caught:
        night(small_site(), tmp_path / "night")
    assert caught.value.exit_code == 1


def constant(channels):
    rate, values = channels["OV-STRAIN"]
    channels["OV-STRAIN"] = (rate, values * 0)


def all_nan(channels):
    rate, values = channels["OV-STRAIN"]
    channels["OV-STRAIN"] = (rate, values * float("nan"))


@pytest.mark.parametrize("edit", [constant, all_nan], ids=["constant", "NaN"])
def test_unusable_strain_writes_nothing(small_site, tmp_path, here, edit):
    config = small_site(dead=False, edit=edit)
    with pytest.raises(NoDataError, match="OV-STRAIN"):
        night(config, tmp_path / "deep" / "night")
    assert not (tmp_path / "deep").exists()


@pytest.mark.parametrize(
    ("start", "end", "text"),
    [
        (SITE_START, SITE_START, "must lie after"),
        (SITE_START + 5, SITE_START, "must lie after"),
        (SITE_START, SITE_START + 40 * 86400, "40 days; the bound is 31"),
        (100, 200, "no data in the ready time"),
        (float("nan"), 200, "out of range"),
    ],
)
def test_a_wrong_range_writes_nothing(small_site, tmp_path, start, end, text):
    with pytest.raises(DqError, match=text) as caught:
        night(small_site(), tmp_path / "night", start=start, end=end)
    assert caught.value.exit_code == 2
    assert not (tmp_path / "night").exists()


def test_vetoes_again_with_another_budget(small_site, tmp_path, here, tree_of):
    config, out = small_site(dead=False), tmp_path / "night"
    night(config, out)
    before = tables(tree_of(out))
    veto_again(out)
    assert tables(tree_of(out)) == before
    veto_again(out, max_dead_time=0.0)
    assert (out / "vetoes.csv").read_text().count("\n") == 1
    assert (out / "segments" / "all_vetoes.txt").exists()
    assert summary_of(out)["dead_time_s"] == 0
    # the night with its own settings notices that the vetoes are not its own
    assert not night(config, out).nothing_to_do
    assert tables(tree_of(out)) == before


def test_page_again(small_site, tmp_path, here, tree_of):
    out = tmp_path / "night"
    night(small_site(dead=False), out)
    before = tables(tree_of(out))
    (out / "index.html").unlink()
    assert report_again(out) == out / "index.html"
    assert tables(tree_of(out)) == before


def test_strain_goes_first_then_the_largest(small_site):
    from dq.night.inputs import read_inputs
    from dq.night.plan import plan_night

    config = small_site()
    inputs = read_inputs(load_config(config))
    span = (SITE_START * 10**9, (SITE_START + SITE_SECONDS) * 10**9)
    plan = plan_night(inputs, *span, config.parent / "state")
    assert [t.channel for t in plan.tasks] == ["OV-STRAIN", "OV-A", "OV-B", "OV-DEAD"]


def test_one_and_two_workers_give_the_same_tables(small_site, tmp_path, tree_of):
    config = small_site()
    for jobs in (1, 2):
        assert night(config, tmp_path / f"jobs{jobs}", jobs=jobs).exit_code == 3
    one, two = tables(tree_of(tmp_path / "jobs1")), tables(tree_of(tmp_path / "jobs2"))
    assert one == two


def test_files_of_another_day_change_nothing(small_site, tmp_path, here, count):
    import h5py
    import numpy as np

    config, out = small_site(dead=False), tmp_path / "night"
    night(config, out)
    count.clear()
    with h5py.File(config.parent / "raw" / "tomorrow.h5", "w") as file:
        data = file.create_dataset("OV-STRAIN", data=np.ones(512))
        data.attrs["gps_start"], data.attrs["sample_rate"] = SITE_START + 86400, 512
    assert night(config, out).nothing_to_do
    assert count == []


def rows_between(out, low, high):
    with (out / "strain_transients.csv").open() as file:
        rows = list(csv.DictReader(file))
    judged = ("witness", "veto")  # these may depend on the whole of a night
    return [
        {k: v for k, v in row.items() if k not in judged}
        for row in rows
        if SITE_START + low <= float(row["gps_time"]) < SITE_START + high
    ]


def test_overlapping_nights_agree_on_the_overlap(small_site, tmp_path, here):
    config = small_site(dead=False)
    early = {"start": SITE_START, "end": SITE_START + 170}
    late = {"start": SITE_START + 90, "end": SITE_START + 250}
    night(config, tmp_path / "early", **early)
    night(config, tmp_path / "late", **late)
    shared = rows_between(tmp_path / "early", 92, 168)
    assert len(shared) >= 4
    assert shared == rows_between(tmp_path / "late", 92, 168)
