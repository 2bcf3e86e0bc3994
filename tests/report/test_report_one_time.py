"""What is told about one time against a slow search through every row."""

import importlib.util
import subprocess
import sys
from pathlib import Path

import pytest

from dq.report import explain
from dq.report.night_tables import read_night
from dq.report.one_time import look_at, rows_near
from dq.segments import NS, Segments
from dq.tables import COVERAGE, VETOES, csv_text

_PATH = Path(__file__).parents[1] / "benchmarks" / "explain_speed.py"
_SPEC = importlib.util.spec_from_file_location("explain_benchmark", _PATH)
bench = importlib.util.module_from_spec(_SPEC)
_SPEC.loader.exec_module(bench)


@pytest.fixture(scope="module")
def day(tmp_path_factory):
    """Write a smaller day: 20 channels of which 30 are accepted at most."""
    folder = tmp_path_factory.mktemp("one_time") / "night"
    with pytest.MonkeyPatch.context() as patch:
        for name, value in (("CHANNELS", 20), ("EACH", 400), ("STRAIN", 500)):
            patch.setattr(bench, name, value)
        patch.setattr(bench, "ACCEPTED", 6)
        bench.write_folder(folder)
    # a fault of the strain, and a second veto over some of the same time
    with (folder / "coverage.csv").open("a") as file:
        file.write(f"OV-STRAIN,saturation,{bench.GPS + 4000},{bench.GPS + 4000}.5\n")
    with (folder / "vetoes.csv").open("a") as file:
        file.write(f"{bench.GPS + 4000},{bench.GPS + 4000}.5,fault-x,1,fault,,\n")
    return folder


def moments(rng, night, count):
    """Give random times, and edges of vetoes to the nanosecond."""
    times = rng.integers(night.start_ns, night.end_ns, count).tolist()
    edges = rng.choice(len(night.vetoes), count, replace=False)
    for k in edges:
        row = night.vetoes.iloc[k]
        times += [int(row.gps_start), int(row.gps_start) - 1, int(row.gps_end)]
        times += [int(row.gps_end) - 1]
    return times


def test_covering_and_nearest_equal_a_slow_search(day, rng):
    whole = read_night(day, tables=("strain", "witnesses", "vetoes", "coverage"))
    for time_ns in moments(rng, whole, 6):
        keep = {
            "strain": rows_near(time_ns, reach_s=1.0),
            "vetoes": rows_near(time_ns, reach_s=0.0),
        }
        night = read_night(
            day, tables=("strain", "witnesses", "vetoes", "coverage"), keep=keep
        )
        found = look_at(night, time_ns, window_s=1.0)
        inside, nearest = set(), None
        for row in whole.vetoes.itertuples():
            if row.gps_start <= time_ns < row.gps_end:
                inside.add((row.veto, row.gps_start))
                away = 0
            elif time_ns < row.gps_start:
                away = row.gps_start - time_ns
            else:
                away = time_ns - (row.gps_end - 1)
            nearest = away if nearest is None else min(nearest, away)
        got = set(zip(found.covering.veto, found.covering.gps_start, strict=True))
        assert got == inside
        assert abs(found.nearest_veto.distance_ns) == nearest
        near = [
            row.transient_id
            for row in whole.strain.itertuples()
            if row.gps_start < time_ns / NS + 1 and row.gps_end > time_ns / NS - 1
        ]
        assert sorted(found.near.transient_id) == sorted(near)


def test_chance_of_activity_is_the_share_of_random_times(day, rng):
    night = read_night(day, tables=("strain", "witnesses", "vetoes", "coverage"))
    told = look_at(night, night.start_ns + 5, window_s=1.0)
    vetoes = night.vetoes[night.vetoes.source == "witness"]
    drawn = rng.integers(night.start_ns, night.end_ns, 40_000)
    union = Segments.none()
    for witness in told.witnesses:
        rows = vetoes[vetoes.channel == witness.row.channel]
        # the benchmark's vetoes are windows around peaks, 0.1 s to each side; those
        # of activity reach over its length as well
        peaks = Segments(rows.gps_start.to_numpy(int), rows.gps_end.to_numpy(int))
        assert witness.chance >= peaks.total_ns / (night.end_ns - night.start_ns)
        union = union | peaks
    assert union.contains(drawn).mean() <= told.any_chance
    assert told.any_chance <= sum(w.chance for w in told.witnesses)


def test_a_fault_is_named_here_and_from_afar(day):
    at = bench.GPS + 4000
    here = explain(day, f"{at}.25")
    assert "nearest data fault: saturation, here" in here
    assert "yes, by fault-x (category 1, fault" in here
    assert "its data cannot be used" in here.splitlines()[-1]
    assert "saturation, 10.000 s away, later" in explain(day, at - 10)
    # the end of a half-open segment is no longer inside
    assert "saturation, here" not in explain(day, f"{at}.5")


def test_active_witnesses_come_with_their_chance(day, rng):
    night = read_night(day, tables=("strain", "witnesses", "vetoes", "coverage"))
    row = night.vetoes[night.vetoes.source == "witness"].iloc[3]
    middle = (int(row.gps_start) + int(row.gps_end)) // 2
    text = explain(day, f"{middle // NS}.{middle % NS:09d}")
    assert f"{row.channel}: SNR >= 7" in text
    assert "active at a random time with probability" in text
    last = text.splitlines()[-1]
    assert row.veto in last
    assert "by chance)" in last


def test_the_answer_loads_no_engine():
    """Nothing that only finding needs may be imported for an answer."""
    code = (
        "import sys; import dq.cli.explain, dq.night.folder, dq.report.explain;"
        "bad = {'numba', 'matplotlib', 'astropy', 'scipy.signal', 'sklearn'};"
        "print(sorted(bad & set(sys.modules)))"
    )
    ran = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True
    )
    assert ran.stdout.strip() == "[]"


def test_written_tables_read_back_where_rows_are_kept(day):
    text = (day / "vetoes.csv").read_text()
    from dq.tables import csv_table

    whole = csv_table(text, VETOES)
    assert csv_text(whole, VETOES) == text
    some = csv_table(text, VETOES, keep=lambda cells: cells["veto"] == "fault-x")
    assert some.gps_start.tolist() == [(bench.GPS + 4000) * NS]
    coverage = csv_table((day / "coverage.csv").read_text(), COVERAGE)
    assert set(coverage.kind) == {"analysed", "saturation"}
