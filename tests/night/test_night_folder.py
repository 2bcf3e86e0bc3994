"""The output folder: lock, refusal of strangers, nothing left behind."""

import errno
import json
import subprocess
import sys

import pytest

from dq.errors import BusyError, InputError, OutputError
from dq.night.folder import NightFolder, read_manifest, write_manifest


def test_a_new_folder_is_made_with_its_parents(tmp_path):
    with NightFolder(tmp_path / "a" / "b") as folder:
        assert folder.path.is_dir()
        assert folder.state.is_dir()


def test_bad_input_leaves_no_trace(tmp_path):
    def fail():
        with NightFolder(tmp_path / "a" / "b") as folder:
            path = folder.state / "x.h5"
            folder.will_write(path)
            path.write_text("half a night")
            raise InputError("no usable strain")

    with pytest.raises(InputError, match="no usable strain"):
        fail()
    assert list(tmp_path.iterdir()) == []


def test_bad_input_keeps_what_stood_before(tmp_path, tree_of):
    with NightFolder(tmp_path / "n") as folder:
        (folder.state / "old.h5").write_text("old")
        folder.start_log()
    before = tree_of(tmp_path)

    def fail():
        with NightFolder(tmp_path / "n"):
            raise InputError("no")

    with pytest.raises(InputError):
        fail()
    assert tree_of(tmp_path) == before


def test_a_begun_run_is_not_undone(tmp_path):
    def fail():
        with NightFolder(tmp_path / "n") as folder:
            folder.start_log()
            raise InputError("late")

    with pytest.raises(InputError):
        fail()
    assert (tmp_path / "n" / "run.log").exists()


def test_a_second_run_is_refused_and_harms_nothing(tmp_path, tree_of):
    with NightFolder(tmp_path / "n"):
        before = tree_of(tmp_path)
        with pytest.raises(BusyError, match="another run"), NightFolder(tmp_path / "n"):
            pass
        assert tree_of(tmp_path) == before
    with NightFolder(tmp_path / "n"):
        pass


def test_a_killed_run_frees_the_folder(tmp_path):
    code = (
        "import os, sys; from dq.night.folder import NightFolder\n"
        "with NightFolder(sys.argv[1]): os._exit(9)"
    )
    done = subprocess.run([sys.executable, "-c", code, tmp_path / "n"], check=False)
    assert done.returncode == 9
    with NightFolder(tmp_path / "n"):
        pass


def test_a_strange_folder_is_refused(tmp_path):
    (tmp_path / "thesis.tex").write_text("do not lose")
    with pytest.raises(InputError, match=r"thesis\.tex.*empty or new"):
        NightFolder(tmp_path).__enter__()
    assert [p.name for p in tmp_path.iterdir()] == ["thesis.tex"]


def test_a_strange_manifest_is_refused(tmp_path):
    (tmp_path / "manifest.json").write_text(json.dumps({"name": "a web page"}))
    with pytest.raises(InputError, match="not written by dq"):
        NightFolder(tmp_path).__enter__()


def test_a_file_is_refused(tmp_path):
    (tmp_path / "n").write_text("x")
    with pytest.raises(InputError, match="is a file"):
        NightFolder(tmp_path / "n").__enter__()
    with pytest.raises(InputError, match="cannot make"):
        NightFolder(tmp_path / "n" / "deeper").__enter__()


def test_a_full_disk_is_exit_1(tmp_path, monkeypatch):
    def full(*_args, **_options):
        raise OSError(errno.ENOSPC, "No space left on device")

    monkeypatch.setattr("pathlib.Path.mkdir", full)
    with pytest.raises(OutputError, match="No space left") as caught:
        NightFolder(tmp_path / "n").__enter__()
    assert caught.value.exit_code == 1


def test_the_log_is_kept(tmp_path):
    import logging

    with NightFolder(tmp_path / "n") as folder:
        folder.start_log()
        logging.getLogger("dq.night").warning("left out: %s", "OV-DEAD")
    assert "WARNING left out: OV-DEAD\n" in (tmp_path / "n" / "run.log").read_text()


def test_manifest_round_trip(tmp_path):
    write_manifest(tmp_path, {"tool": "dq", "state": "running"})
    assert read_manifest(tmp_path)["state"] == "running"
    with pytest.raises(InputError, match="holds no manifest"):
        read_manifest(tmp_path / "elsewhere")


def test_half_written_files_of_a_killed_run_are_removed(tmp_path):
    (tmp_path / "state").mkdir()
    half = [tmp_path / ".manifest.json.ab12_x9z", tmp_path / "state" / ".A.h5.abcd1234"]
    for path in half:
        path.write_text("half")
    with NightFolder(tmp_path):
        assert not any(path.exists() for path in half)
