"""``dq sort`` on a small site, with a stand-in for the family sorter."""

import csv
import io

import pandas as pd
import pytest
import stand_in_sorter
from small_site import SITE_BURSTS, SITE_SECONDS, SITE_START

from dq.cli.main import main

RANGE = ["--start", str(SITE_START), "--end", str(SITE_START + SITE_SECONDS)]


@pytest.fixture
def model(monkeypatch, tmp_path):
    """Give a model file, and put a sorter in place that calls everything a burst."""

    def sort_transients(features, model):
        return pd.DataFrame(
            {
                "family": ["burst"] * len(features),
                "probability": 1.0,
                "family_set": "burst",
                "novelty": 0.0,
            }
        )

    stand_in_sorter.install(monkeypatch, sort_transients)
    path = tmp_path / "model.skops"
    path.write_text("stand-in")
    return str(path)


@pytest.fixture
def site(small_site):
    return str(small_site())


def rows_of(text):
    return list(csv.DictReader(io.StringIO(text)))


@pytest.mark.parametrize("kind", ["csv", "h5"])
def test_sort_reads_what_find_wrote(kind, site, model, tmp_path, capsys):
    found = tmp_path / f"found.{kind}"
    assert main(["find", site, "OV-STRAIN", *RANGE, "--out", str(found)]) == 0
    assert main(["sort", site, str(found), "--model", model]) == 0
    rows = rows_of(capsys.readouterr().out)
    assert len(rows) >= len(SITE_BURSTS)
    assert {r["family"] for r in rows} == {"burst"}
    out = tmp_path / "sorted.csv"
    assert main(["sort", site, str(found), "--model", model, "--out", str(out)]) == 0
    assert rows_of(out.read_text()) == rows
    # what sort wrote can be sorted again
    assert main(["sort", site, str(out), "--model", model]) == 0
    assert rows_of(capsys.readouterr().out) == rows


def test_transients_without_data_stay_unsorted_and_are_listed(
    site, model, tmp_path, capsys
):
    found = tmp_path / "found.csv"
    assert main(["find", site, "OV-STRAIN", *RANGE, "--out", str(found)]) == 0
    table = pd.read_csv(found)
    table.loc[0, ["gps_time", "gps_start", "gps_end"]] -= 1000
    table.to_csv(found, index=False)
    assert main(["sort", site, str(found), "--model", model]) == 3
    done = capsys.readouterr()
    assert [r["family"] for r in rows_of(done.out)][:2] == ["unsorted", "burst"]
    assert "is not sorted: outside the recorded ready time" in done.err


def test_an_empty_table_gives_an_empty_table(site, model, tmp_path, capsys):
    found = tmp_path / "found.csv"
    assert main(["find", site, "OV-STRAIN", *RANGE, "--out", str(found)]) == 0
    found.write_text(found.read_text().splitlines()[0] + "\n")
    assert main(["sort", site, str(found), "--model", model]) == 0
    assert rows_of(capsys.readouterr().out) == []


@pytest.mark.parametrize(
    ("name", "text", "message"),
    [
        ("no.csv", None, "is no file"),
        ("a.txt", "x", "must end in .csv or .h5"),
        ("a.csv", "gps_time\n5\n", "does not read back"),
        ("a.h5", "not HDF5", "cannot read"),
    ],
)
def test_a_wrong_table_is_one_line_and_code_2(
    name, text, message, site, model, tmp_path, capsys
):
    path = tmp_path / name
    if text is not None:
        path.write_text(text)
    assert main(["sort", site, str(path), "--model", model]) == 2
    error = capsys.readouterr().err
    assert message in error
    assert error.count("\n") == 1


def test_a_row_that_cannot_be_is_named(site, model, tmp_path, capsys):
    found = tmp_path / "found.csv"
    main(["find", site, "OV-STRAIN", *RANGE, "--out", str(found)])
    table = pd.read_csv(found)
    table.loc[1, "gps_end"] = table.loc[1, "gps_start"] - 1
    table.to_csv(found, index=False)
    assert main(["sort", site, str(found), "--model", model]) == 2
    assert "row 2" in capsys.readouterr().err


def test_a_missing_model_is_told(site, tmp_path, capsys):
    found = tmp_path / "found.csv"
    main(["find", site, "OV-STRAIN", *RANGE, "--out", str(found)])
    assert main(["sort", site, str(found), "--model", "nowhere.skops"]) == 2
    assert "'nowhere.skops' is no file" in capsys.readouterr().err
