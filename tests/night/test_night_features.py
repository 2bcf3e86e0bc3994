"""Features and families within a night: files, resuming, turning off, dq veto."""

import json

import pandas as pd
import pytest
import stand_in_sorter
from small_site import SITE_SECONDS, SITE_START

from dq.config import load_config
from dq.errors import DqError, InputError
from dq.features import NAMES
from dq.night import feature_stage, run_night, veto_again
from dq.night.ledger import read_ledger

WITH = "[families]\nfeatures = true\n"


def night(config, out, **options):
    return run_night(
        load_config(config),
        out=out,
        start=SITE_START,
        end=SITE_START + SITE_SECONDS,
        jobs=1,
        **options,
    )


@pytest.fixture
def measured(monkeypatch):
    """Count the feature passes."""
    real, seen = feature_stage.measure_transients, []

    def counting(data, transients, **options):
        seen.append(len(transients))
        return real(data, transients, **options)

    monkeypatch.setattr(feature_stage, "measure_transients", counting)
    return seen


@pytest.fixture
def sorter(monkeypatch):
    """Stand in for the family sorter: tells low from high frequencies."""

    def sort_transients(features, model):
        assert list(features.columns) == list(NAMES)
        low = features["centroid_hz"] < float(model.read_text())
        return pd.DataFrame(
            {
                "family": low.map({True: "low", False: "high"}),
                "probability": 0.9,
                "family_set": "low;high",
                "novelty": 0.1,
            }
        )

    stand_in_sorter.install(monkeypatch, sort_transients)


def test_a_night_writes_features_only_when_asked(small_site, tmp_path, here):
    night(small_site("a"), tmp_path / "plain")
    assert not (tmp_path / "plain" / "strain_features.csv").exists()
    out = tmp_path / "night"
    outcome = night(small_site("b", extra=WITH), out)
    assert "features" in outcome.seconds
    features = pd.read_csv(out / "strain_features.csv")
    strain = pd.read_csv(out / "strain_transients.csv")
    assert list(features.columns) == ["transient_id", *NAMES]
    assert features["transient_id"].tolist() == strain["transient_id"].tolist()
    assert features[list(NAMES)].notna().all(axis=None)
    assert set(strain["family"]) == {"unsorted"}
    # a burst of 40 Hz, sigma 0.04 s of its amplitude, planted eight times
    loud = features[strain["snr"] > 10]
    assert len(loud) == 8
    assert loud["centroid_hz"].between(35, 45).all()
    ledger = read_ledger(out, "OV-STRAIN")
    assert len(ledger.features) == len(ledger.families) == len(strain)


def test_features_are_kept_and_give_the_same_files(
    small_site, tmp_path, here, measured, tree_of
):
    config, out = small_site(extra=WITH), tmp_path / "night"
    night(config, out)
    before = tree_of(out)
    (out / "index.html").unlink()
    assert not night(config, out).nothing_to_do
    assert len(measured) == 1
    after = tree_of(out)
    for name in before:
        if name.endswith((".csv", ".h5")):
            assert after[name] == before[name], name


def test_another_mains_frequency_measures_again(small_site, tmp_path, here, measured):
    config, out = small_site(extra=WITH), tmp_path / "night"
    night(config, out)
    text = config.read_text()
    config.write_text(text.replace('strain = "OV', 'mains_hz = 60.0\nstrain = "OV'))
    night(config, out)
    assert len(measured) == 2
    assert len(list((out / "state").glob("features-*.csv"))) == 1


def test_turned_off_the_features_are_gone(small_site, tmp_path, here):
    config, out = small_site(extra=WITH), tmp_path / "night"
    night(config, out)
    config.write_text(config.read_text().replace(WITH, ""))
    night(config, out)
    assert not (out / "strain_features.csv").exists()
    assert "strain_features.csv" not in (out / "manifest.json").read_text()


def test_families_reach_the_table_and_outlast_dq_veto(
    small_site, tmp_path, here, sorter
):
    config = small_site(extra='[families]\nmodel = "model.txt"\n')
    (config.parent / "model.txt").write_text("60")
    out = tmp_path / "night"
    night(config, out)
    strain = pd.read_csv(out / "strain_transients.csv")
    assert set(strain.loc[strain["snr"] > 10, "family"]) == {"low"}
    assert set(strain["probability"]) == {0.9}
    summary = json.loads((out / "summary.json").read_text())
    assert summary["families"]["low"] >= 8
    before = (out / "strain_transients.csv").read_bytes()
    veto_again(out)
    assert (out / "strain_transients.csv").read_bytes() == before
    # another model sorts anew
    (config.parent / "model.txt").write_text("1")
    night(config, out)
    assert set(pd.read_csv(out / "strain_transients.csv")["family"]) == {"high"}


def test_a_model_that_is_not_there_is_told_before_the_work(small_site, tmp_path):
    config = small_site(extra='[families]\nmodel = "nowhere.skops"\n')
    with pytest.raises(InputError, match=r"nowhere\.skops' is no file"):
        night(config, tmp_path / "night")
    assert not (tmp_path / "night").exists()


def test_a_file_that_is_no_model_is_told_before_the_work(small_site, tmp_path):
    config = small_site(extra='[families]\nmodel = "model.txt"\n')
    (config.parent / "model.txt").write_text("60")
    with pytest.raises(InputError, match="model"):
        night(config, tmp_path / "night")
    assert not (tmp_path / "night").exists()


def test_lost_files_are_told_in_one_line(small_site, tmp_path, here, monkeypatch):
    def lost(*args, **options):
        raise OSError(5, "Input/output error")

    monkeypatch.setattr(feature_stage, "measure_transients", lost)
    with pytest.raises(DqError, match="run the same command") as told:
        night(small_site(extra=WITH), tmp_path / "night")
    assert told.value.exit_code == 1


def test_a_table_of_another_length_is_refused(small_site, tmp_path, here):
    out = tmp_path / "night"
    night(small_site(extra=WITH), out)
    path = out / "strain_features.csv"
    path.write_text("\n".join(path.read_text().splitlines()[:-1]) + "\n")
    with pytest.raises(InputError, match="rows for"):
        veto_again(out)
