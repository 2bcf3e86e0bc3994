"""Training from data: planted chirps, quieter copies, a night sorted by the model."""

import numpy as np
import pandas as pd
import pytest
from memory_channel import NS, MemoryChannel
from small_site import SITE_BURSTS, SITE_SECONDS, SITE_START

import dq.night.labelled
from dq.config import load_config, parse_config
from dq.features import NAMES
from dq.night import run_night
from dq.night.channel import analyse_channel
from dq.night.copies import LOWEST_SNR, measure_copies
from dq.night.guard import chirp_features
from dq.night.strain_features import measure_transients
from dq.night.train import train

RATE, SECONDS, START = 1024, 512, 1_420_000_256


@pytest.fixture(scope="module")
def strain():
    """Noise with a ringing note every 40 s, its transients and how it is analysed."""
    rng = np.random.default_rng(3)
    t = np.arange(SECONDS * RATE) / RATE
    x = rng.standard_normal(len(t))
    for at in np.arange(30.0, SECONDS - 30, 40.0):
        after = np.clip(t - at, 0.0, None)
        wave = np.exp(-after / 0.05) * np.sin(2 * np.pi * 90 * after) * (t >= at)
        x += 30 * wave / np.sqrt(np.sum(wave**2))
    data = MemoryChannel("OV-STRAIN", RATE, START * NS, x)
    config = parse_config(
        {
            "site": {"name": "Orrin Vale", "strain": "OV-STRAIN"},
            "data": {"files": ["x.h5"], "channels": "channels.csv"},
        }
    )
    found = analyse_channel(
        data,
        ready=None,
        start_ns=START * NS,
        end_ns=(START + SECONDS) * NS,
        config=config,
    )
    return data, found, {"ready": None, "config": config}


def test_planted_chirps_are_found_and_sweep_up(strain):
    data, found, options = strain
    chirps = chirp_features(data, found, count=20, **options)
    again = chirp_features(data, found, count=20, **options)
    assert list(chirps.columns) == list(NAMES)
    assert len(chirps) == 20
    pd.testing.assert_frame_equal(chirps, again)
    assert (chirps["ridge_slope_octaves_s"] > 0).mean() > 0.8


def test_copies_are_quieter_and_alike(strain):
    data, found, options = strain
    loud = found.transients[found.transients["snr"] > 15].reset_index(drop=True)
    copies = measure_copies(
        data, loud, per_example=3, among=found.transients, **options
    )
    own = measure_transients(data, loud, among=found.transients, **options).table
    assert len(copies) == 3 * len(loud)
    parent = loud["snr"].to_numpy()[copies["parent"].to_numpy(int)]
    assert (copies["snr"] <= 0.5 * parent + 1e-9).all()
    assert (copies["snr"] >= LOWEST_SNR).all()
    # the note is the same, its noise is not
    middle = own["centroid_hz"].median()
    assert copies["centroid_hz"].median() == pytest.approx(middle, rel=0.1)
    assert not np.isclose(
        copies["centroid_hz"].to_numpy()[:, None], own["centroid_hz"].to_numpy()
    ).any()


def test_a_quiet_example_has_no_copies(strain):
    data, found, options = strain
    quiet = found.transients.iloc[:2].assign(snr=2 * LOWEST_SNR - 0.5)
    copies = measure_copies(
        data, quiet, per_example=3, among=found.transients, **options
    )
    assert len(copies) == 0


def test_a_night_is_sorted_by_a_model_from_its_labels(
    small_site, tmp_path, monkeypatch
):
    monkeypatch.setattr(dq.night.labelled, "GUARD_CHIRPS", 16)
    config = small_site(extra='[families]\nmodel = "thump.model"\n')
    labels = config.parent / "labels.csv"
    rows = [f"{SITE_START + t},OV-STRAIN,thump,me" for t in SITE_BURSTS]
    labels.write_text("gps_time,channel,family,labeller\n" + "\n".join(rows) + "\n")
    done = train(
        load_config(config), labels=labels, model=config.parent / "thump.model"
    )
    assert list(done.sorter.classes_) == ["chirp_like", "thump"]
    counts = done.report.families.set_index("family")["examples"]
    # copies and chirps teach; only chirps and examples are measured on
    assert counts["thump"] == len(SITE_BURSTS)
    out = tmp_path / "night"
    run_night(
        load_config(config),
        start=SITE_START,
        end=SITE_START + SITE_SECONDS,
        out=out,
        jobs=1,
    )
    strain = pd.read_csv(out / "strain_transients.csv")
    loud = strain[strain["snr"] > 12]
    assert len(loud) == len(SITE_BURSTS)
    assert (loud["family"] == "thump").mean() > 0.7
    assert not (loud["family"] == "chirp_like").any()
    page = (out / "index.html").read_text()
    assert "Noise families" in page
    assert "thump" in page
