"""Every verb on a small site, as a user runs it."""

import csv
import io
import json
import os
import signal
import subprocess
import sys
import time

import pytest
from small_site import SITE_BURSTS, SITE_SECONDS, SITE_START

from dq.cli.main import main

RANGE = ["--start", str(SITE_START), "--end", str(SITE_START + SITE_SECONDS)]


@pytest.fixture(scope="module")
def done(tmp_path_factory):
    """Run one night through the command line, in processes; give its folder."""
    from small_site import write_site

    base = tmp_path_factory.mktemp("verbs")
    config = write_site(base / "site")
    out = base / "night"
    ran = subprocess.run(
        [sys.executable, "-m", "dq", "night", config, *RANGE, "--out", out],
        capture_output=True,
        text=True,
        check=False,
    )
    return config, out, ran


def test_night_tells_what_it_did(done):
    _, out, ran = done
    assert ran.returncode == 3, ran.stderr
    assert "left out: OV-DEAD: " in ran.stdout
    assert f"page: {out / 'index.html'}" in ran.stdout
    assert "channels: 4 of 4" in ran.stderr
    assert "Traceback" not in ran.stderr
    assert "Warning" not in ran.stderr


def test_night_again_has_nothing_to_do(done, capsys):
    config, out, _ = done
    code = main(["night", str(config), *RANGE, "--out", str(out)])
    assert code == 3
    assert "nothing to do" in capsys.readouterr().out


def test_find_prints_csv_that_agrees_with_the_night(done, capsys):
    config, out, _ = done
    assert main(["find", str(config), "OV-STRAIN", *RANGE]) == 0
    rows = list(csv.DictReader(io.StringIO(capsys.readouterr().out)))
    with (out / "strain_transients.csv").open() as file:
        night = list(csv.DictReader(file))
    assert len(rows) >= len(SITE_BURSTS)
    assert [r["gps_time"] for r in rows] == [r["gps_time"] for r in night]
    assert [r["snr"] for r in rows] == [r["snr"] for r in night]


def test_find_writes_files_and_takes_a_threshold(done, tmp_path, capsys):
    config, _, _ = done
    times = [*RANGE, "--snr", "20"]
    target = tmp_path / "a.csv"
    assert main(["find", str(config), "OV-A", *times, "--out", str(target)]) == 0
    assert capsys.readouterr().out == ""
    rows = list(csv.DictReader(io.StringIO(target.read_text())))
    assert rows
    assert all(float(r["snr"]) >= 20 for r in rows)
    target = tmp_path / "a.h5"
    assert main(["find", str(config), "OV-A", *times, "--out", str(target)]) == 0

    from dq.writers import read_transients_h5

    assert len(read_transients_h5(target)["OV-A"]) == len(rows)


@pytest.mark.parametrize(
    ("channel", "text"),
    [("OV-a", "nearest is 'OV-A'"), ("OV-DEAD", "constant")],
)
def test_find_refuses_what_it_cannot_use(done, capsys, channel, text):
    config, _, _ = done
    assert main(["find", str(config), channel, *RANGE]) == 2
    captured = capsys.readouterr()
    assert captured.out == ""
    assert text in captured.err


def test_find_refuses_an_unusable_target_at_once(done, tmp_path, capsys):
    config, _, _ = done
    for name, text in (("no/a.csv", "does not exist"), (".", "is a folder")):
        target = str(tmp_path / name)
        assert main(["find", str(config), "OV-A", *RANGE, "--out", target]) == 2
        assert text in capsys.readouterr().err


def test_check_says_all_is_well(small_site, capsys):
    config = small_site(dead=False)
    assert main(["check", str(config)]) == 0
    out = capsys.readouterr().out
    assert "nothing odd" in out
    assert "OV-STRAIN, 512 Hz" in out


def test_check_names_what_is_odd_and_unusable(small_site, capsys):
    config = small_site(dead=False, gap=(100, 110))
    (config.parent / "channels.csv").write_text(
        "channel,role,sample_rate\nOV-STRAIN,strain,512\nOV-A,auxiliary,250\n"
        "OV-GONE,auxiliary,\n"
    )
    (config.parent / "raw" / "b.h5").write_bytes(b"this is no HDF5 file")
    assert main(["check", str(config)]) == 3
    out = capsys.readouterr().out
    assert "OV-GONE: no data: it is in none of the data files" in out
    assert "OV-A: recorded at 256 Hz, listed as 250 Hz" in out
    assert "in the files, not on the list: OV-B" in out
    assert "b.h5" in out
    assert f"{SITE_START + 100}..{SITE_START + 110}" in out


def test_check_without_strain_is_exit_2(small_site, capsys):
    config = small_site(edit=lambda channels: channels.pop("OV-STRAIN"))
    (config.parent / "channels.csv").write_text("channel,role\nOV-STRAIN,strain\n")
    assert main(["check", str(config)]) == 2
    assert "OV-STRAIN" in capsys.readouterr().err


def test_explain_a_burst_and_an_unjudged_time(done, capsys):
    _, out, _ = done
    assert main(["explain", str(out), str(SITE_START + SITE_BURSTS[3])]) == 0
    assert "OV-A" in capsys.readouterr().out
    assert main(["explain", str(out), f"{SITE_START}.5"]) == 0
    assert "neither clean nor vetoed" in capsys.readouterr().out
    assert main(["explain", str(out), str(SITE_START - 100)]) == 2
    assert "outside the night" in capsys.readouterr().err


def test_veto_prints_the_cost(done, capsys):
    _, out, _ = done
    assert main(["veto", str(out)]) == 0
    lines = capsys.readouterr().out.splitlines()
    assert lines[0].split()[0] == "veto"
    assert any(line.startswith("all") for line in lines)


def test_veto_says_what_the_user_decides(done, capsys):
    _, out, _ = done
    assert main(["veto", str(out)]) == 0
    text = capsys.readouterr().out
    assert "A veto can delete a discovery" in text
    assert "collaboration's own review has the last word" in text
    assert "no choice within the budget removes more than" in text


def test_veto_on_the_triggers_of_a_search(done, tmp_path, capsys):
    _, out, _ = done
    path = tmp_path / "mine.csv"
    lines = [f"{SITE_START + 20 + k * 2.5},{6 + k % 9},x" for k in range(80)]
    lines += [f"{SITE_START + at + d},300,x" for at in SITE_BURSTS for d in (0, 0.02)]
    path.write_text("\n".join(["gps_time,snr,template", *lines]) + "\n")
    before = (out / "vetoes.csv").read_bytes()
    assert main(["veto", str(out), "--search-triggers", str(path)]) == 0
    text = capsys.readouterr().out
    assert "Against the triggers of mine.csv" in text
    assert "the vetoes gain more than they lose" in text
    assert (out / "vetoes.csv").read_bytes() == before
    summary = json.loads((out / "summary.json").read_text())
    volume = summary["volume_time_ratio"]
    assert volume["low"] <= volume["value"] <= volume["high"]
    assert volume["background"] == "triggers of mine.csv"
    assert main(["veto", str(out)]) == 0


@pytest.mark.parametrize(
    ("text", "told"),
    [
        ("gps_time\n1420000000\n", "column 'snr' is missing"),
        ("gps_time,snr\n", "holds no trigger"),
        ("gps_time,snr\n1420000000,\n", "line 2: snr is empty"),
        ("gps_time,snr\n1420000000,-3\n", "must be a positive number"),
        ("gps_time,snr\nnow,8\n", "is no GPS time"),
    ],
)
def test_bad_triggers_are_one_line(done, tmp_path, capsys, tree_of, text, told):
    _, out, _ = done
    path = tmp_path / "bad.csv"
    path.write_text(text)
    before = tree_of(out)
    assert main(["veto", str(out), "--search-triggers", str(path)]) == 2
    err = capsys.readouterr().err
    assert err.count("\n") == 1
    assert told in err
    assert tree_of(out) == before


def test_report_writes_the_page_again(done, capsys):
    _, out, _ = done
    (out / "index.html").unlink()
    assert main(["report", str(out)]) == 0
    assert capsys.readouterr().out.strip() == str(out / "index.html")
    assert (out / "index.html").stat().st_size > 1000


def workers(pid):
    """Give the process ids of a night's worker processes."""
    found = []
    try:
        with open(f"/proc/{pid}/task/{pid}/children") as file:
            children = file.read().split()
        for child in children:
            with open(f"/proc/{child}/cmdline") as file:
                if "spawn_main" in file.read():
                    found.append(int(child))
    except OSError:
        pass
    return found


def workers_of(process):
    """Wait until a night has a worker; give the workers' ids."""
    for _ in range(1200):
        if process.poll() is not None or workers(process.pid):
            break
        time.sleep(0.025)
    return workers(process.pid)


def alive(pid):
    """Tell whether a process runs; one that nobody has waited for does not."""
    try:
        with open(f"/proc/{pid}/stat") as file:
            return file.read().rpartition(")")[2].split()[0] not in "ZX"
    except OSError:
        return False


@pytest.mark.skipif(not os.path.exists("/proc/self/task"), reason="needs /proc")
@pytest.mark.parametrize("name", ["SIGKILL", "SIGINT", "SIGTERM"])
def test_a_killed_night_leaves_no_process_and_resumes(small_site, tmp_path, name):
    config, out = small_site(dead=False), tmp_path / "night"
    command = [sys.executable, "-m", "dq", "night", config, *RANGE, "--out", out]
    with subprocess.Popen(
        command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    ) as process:
        started = workers_of(process)
        process.send_signal(getattr(signal, name))
        err = process.communicate(timeout=60)[1]
    assert started
    if name == "SIGINT":
        assert process.returncode == 130
        assert err.splitlines()[-1].startswith("dq: error: interrupted")
    for _ in range(100):
        if not any(alive(pid) for pid in started):
            break
        time.sleep(0.1)
    assert not any(alive(pid) for pid in started)
    ran = subprocess.run(command, capture_output=True, text=True, check=False)
    assert ran.returncode == 0, ran.stderr


@pytest.mark.skipif(not os.path.exists("/proc/self/task"), reason="needs /proc")
def test_a_killed_worker_is_one_line(small_site, tmp_path):
    config, out = small_site(dead=False), tmp_path / "night"
    command = [sys.executable, "-m", "dq", "night", config, *RANGE, "--out", out]
    with subprocess.Popen(
        command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    ) as process:
        for pid in workers_of(process):
            os.kill(pid, signal.SIGKILL)
        err = process.communicate(timeout=60)[1]
    assert process.returncode == 1, err
    assert "Traceback" not in err
    assert "run the same command" in err.splitlines()[-1]
    ran = subprocess.run(command, capture_output=True, text=True, check=False)
    assert ran.returncode == 0, ran.stderr
