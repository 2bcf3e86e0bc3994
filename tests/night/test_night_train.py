"""From labels to model and report, and every way in which labels can be bad."""

import json
from functools import partial

import numpy as np
import pandas as pd
import pytest
from family_table import family_table
from small_site import SITE_START, write_site

from dq.cli.main import main
from dq.config import load_config
from dq.errors import TrainingError
from dq.families import FamilySorter, load_model
from dq.night.train import train

CONFIG = """[site]
name = "Orrin Vale"
strain = "OV-STRAIN"
[data]
files = ["raw/*.h5"]
channels = "channels.csv"
"""

START = 1_420_000_000


@pytest.fixture(scope="module", autouse=True)
def few_trees():
    """Grow small forests: what is tested here is the way, not the skill."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("dq.night.train.FamilySorter", partial(FamilySorter, 12))
        yield


@pytest.fixture(scope="module")
def training_set(tmp_path_factory):
    """Give a folder with a ready feature table, labels by two people, and a copy."""
    folder = tmp_path_factory.mktemp("set")
    table, family, epoch = family_table(71, each=16, epochs=12)
    order = np.argsort(epoch, kind="stable")
    table, family, epoch = table.iloc[order], family[order], epoch[order]
    times = START + 64.0 * epoch + np.arange(len(epoch)) % 60 + 0.25
    about = pd.DataFrame(
        {
            "transient_id": [f"t{i}" for i in range(len(times))],
            "gps_time": times,
            "parent": "",
        }
    )
    features = pd.concat([about, table.reset_index(drop=True)], axis=1)
    copy = features.iloc[[5]].assign(transient_id="c0", parent="t5")
    pd.concat([features, copy]).to_csv(folder / "features.csv", index=False)
    rows = [f"{t:.3f},OV-STRAIN,{f},ada" for t, f in zip(times, family, strict=True)]
    rows += [
        f"{t:.3f},OV-STRAIN,{f},bo"
        for t, f in zip(times[::3], family[::3], strict=True)
    ]
    rows += [f"{START + 5000}.5,OV-STRAIN,arch,bo", f"{START}.25,OV-MIC,arch,bo"]
    text = "\n".join(["gps_time,channel,family,labeller", *rows])
    (folder / "labels.csv").write_text(text + "\n")
    (folder / "dq.toml").write_text(CONFIG)
    return folder


def arguments(folder, model, labels=None, features="features.csv"):
    return [
        "train",
        str(folder / "dq.toml"),
        "--labels",
        str(labels or folder / "labels.csv"),
        "--features",
        str(folder / features),
        "--model",
        str(model),
    ]


@pytest.fixture(scope="module")
def trained(training_set, tmp_path_factory):
    out = tmp_path_factory.mktemp("out")
    assert main(arguments(training_set, out / "families.model")) == 0
    return out


def test_model_and_report_are_written(trained):
    sorter, meta = load_model(trained / "families.model")
    assert meta["examples"] == 96
    assert meta["site"] == "Orrin Vale"
    assert len(meta["labels_sha256"]) == len(meta["data_sha256"]) == 64
    assert sorter.classes_.tolist()[:2] == ["arch", "chirp_like"]
    report = trained / "families_report"
    names = {p.name for p in report.iterdir()}
    assert {"index.html", "families.csv", "audit.csv", "unmatched.csv"} <= names
    agreement = pd.read_csv(report / "agreement.csv")
    assert agreement[["first", "second", "both"]].to_numpy().tolist() == [
        ["ada", "bo", 32]
    ]
    assert agreement["kappa"].tolist() == [1.0]
    unmatched = pd.read_csv(report / "unmatched.csv")
    assert len(unmatched) == 2
    assert unmatched["reason"].str.contains("away|not the strain").all()
    # the replanted copy is trained on and never scored
    assert pd.read_csv(report / "confusion.csv").iloc[:, 1:].sum().sum() == 96


def test_the_page_is_whole_and_needs_no_network(trained):
    page = (trained / "families_report" / "index.html").read_text(encoding="utf-8")
    assert "http" not in page.replace("http-equiv", "")
    for text in ("Families", "chirp_like", "Kappa", "Labels to look at again", "96"):
        assert text in page
    assert page.count("<img") == page.count('alt="') == 4


def test_the_same_labels_give_the_same_files(training_set, trained, tmp_path, tree_of):
    assert main(arguments(training_set, tmp_path / "families.model")) == 0
    assert tree_of(tmp_path) == tree_of(trained)


def test_what_is_printed(training_set, tmp_path, capsys):
    main(arguments(training_set, tmp_path / "m"))
    out = capsys.readouterr().out
    for text in ("macro-F1", "chirp_like:", "2 labels were not used", "page:"):
        assert text in out


def test_simulated_chirps_make_a_guard(training_set, tmp_path):
    """None is labelled, yet the family is there and its misses are reported."""
    text = (training_set / "labels.csv").read_text()
    kept = [x for x in text.splitlines() if "chirp_like" not in x]
    (tmp_path / "labels.csv").write_text("\n".join(kept) + "\n")
    table, family, _ = family_table(72, each=20)
    chirps = table[family == "chirp_like"]
    options = {
        "labels": tmp_path / "labels.csv",
        "features": training_set / "features.csv",
        "model": tmp_path / "m",
    }
    config = load_config(training_set / "dq.toml")
    done = train(config, chirps=chirps, **options)
    assert done.report.guard["examples"] == 20
    assert done.report.guard["missed"] <= 2
    assert not any("chirp_like" in note for note in done.notes)
    with pytest.raises(TrainingError, match="measure both alike"):
        train(config, chirps=chirps.iloc[:, ::-1], **options)


@pytest.mark.parametrize(
    ("lines", "text"),
    [
        ([], "hold no label"),
        (["1420000000,OV-STRAIN,arch"], "3 cells"),
        (["soon,OV-STRAIN,arch,ada"], "line 2"),
        (["1420000000,OV-STRAIN,,ada"], "family is empty"),
        (["1420000000,OV-STRAIN,arch,"], "labeller is empty"),
        (["1420000000,OV STRAIN,arch,ada"], "not allowed"),
        (["1420000000,OV-STRAIN,unknown,ada"], "line 2: family 'unknown' is reserved"),
        (["1420000000,OV-MIC,arch,ada"], "no label is of the strain channel"),
        (["1300000000,OV-STRAIN,arch,ada"], "none of 1 labels lies at a transient"),
        ([f"{START}.25,OV-STRAIN,arch,ada"], "1 class"),
    ],
)
def test_bad_labels_are_one_line_and_nothing_is_written(
    training_set, tmp_path, capsys, lines, text
):
    labels = tmp_path / "labels.csv"
    labels.write_text("\n".join(["gps_time,channel,family,labeller", *lines]) + "\n")
    assert main(arguments(training_set, tmp_path / "m", labels)) == 2
    error = capsys.readouterr().err.strip()
    assert error.startswith("dq: error:")
    assert "\n" not in error.split("dq: error:")[1]
    assert text in error
    assert [p.name for p in tmp_path.iterdir()] == ["labels.csv"]


@pytest.mark.parametrize(
    ("content", "text"),
    [
        ("a,b\n1,2\n", "'gps_time' is missing"),
        ("gps_time\n1\n", "no feature column"),
        ("gps_time,a\n1,x\n", "line 2: a = 'x'"),
        ("gps_time,a\n1,inf\n", "no finite number"),
        ("gps_time,a\n,1\n", "line 2: gps_time"),
        ("", "no CSV table"),
    ],
)
def test_bad_features_are_refused(training_set, tmp_path, capsys, content, text):
    (tmp_path / "bad.csv").write_text(content)
    bad = arguments(training_set, tmp_path / "m", features=tmp_path / "bad.csv")
    assert main(bad) == 2
    assert text in capsys.readouterr().err
    assert [p.name for p in tmp_path.iterdir()] == ["bad.csv"]


def test_bad_targets_are_refused_first(training_set, tmp_path, capsys):
    assert main(arguments(training_set, tmp_path / "absent" / "m")) == 2
    assert main(arguments(training_set, tmp_path)) == 2
    assert capsys.readouterr().err.count("dq: error: ") == 2
    assert list(tmp_path.iterdir()) == []


def test_transients_are_found_and_measured_at_the_labels(tmp_path):
    """The features come from a given function: here the transients' own columns."""
    config = load_config(write_site(tmp_path / "site"))
    seen = []

    def features_at(config, channel, transients):
        seen.append((channel, len(transients)))
        return np.log(transients[["frequency_hz", "q", "snr"]].astype(float))

    from dq.night.find import find_in_channel

    found = find_in_channel(
        config, config.site.strain, start=SITE_START, end=SITE_START + 250
    ).transients
    times = found["gps_time"].to_numpy(float)
    middle = np.median(found["frequency_hz"])
    rows = [
        f"{t:.6f},{config.site.strain},{'high' if f > middle else 'low'},ada"
        for t, f in zip(times, found["frequency_hz"], strict=True)
    ]
    labels = tmp_path / "labels.csv"
    labels.write_text("\n".join(["gps_time,channel,family,labeller", *rows]) + "\n")
    done = train(config, labels=labels, model=tmp_path / "m", features_at=features_at)
    assert seen[0][0] == config.site.strain
    assert seen[0][1] >= len(found)
    assert done.report.figures["examples"] == len(found)
    assert any("no chirp_like examples" in note for note in done.notes)
    assert json.loads(json.dumps(done.report.figures))["families"] == 2
