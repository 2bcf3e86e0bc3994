"""Whether the features tell the invented families apart on other nights.

``python tests/benchmarks/feature_separation.py [TRAIN ...] [-- TEST ...]`` makes nights
of the invented site in memory (by default seeds 100-105 to train on, 110-112 with 1.4
times the noise to measure), finds and measures their strain transients, matches them
to the truth in time, fits a plain forest and prints precision, recall and F1 of each
family by SNR of the loudest tile. The tool's own sorter is another part; this judges
the features alone. One hour each; about 15 s of CPU per night.
"""

from __future__ import annotations

import os

os.environ.setdefault("OMP_NUM_THREADS", "1")
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import io
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd

sys.path.insert(0, str(Path(__file__).parents[1]))

import planted
from memory_channel import NS, MemoryChannel

from dq.features import FEATURES, NAMES
from dq.observatory import SiteSettings
from dq.observatory.listing import transient_truth
from dq.observatory.recording import record_strain
from dq.observatory.schedule import plan_night

#: SNR ranges that are reported.
RANGES = ((8.0, np.inf), (6.5, 8.0))


def match(found: pd.DataFrame, truth: pd.DataFrame) -> np.ndarray:
    """Name each found transient after the planted one that it overlaps most.

    A found one within 20 ms of a planted one still counts; others are empty text.
    """
    start, end = (truth[c].to_numpy() for c in ("gps_start", "gps_end"))
    names = []
    for row in found.itertuples():
        common = np.minimum(end, row.gps_end) - np.maximum(start, row.gps_start)
        best = int(common.argmax())
        names.append(truth["family"].iloc[best] if common[best] > -0.02 else "")
    return np.array(names)


def one_night(seed: int, **changes) -> pd.DataFrame:
    """Give the features of a night's matched transients, with family and SNR."""
    settings = replace(SiteSettings(seed=seed, rate_scale=1.5), **changes)
    night = plan_night(settings)
    truth = pd.read_csv(io.StringIO(transient_truth(night)))
    strain = record_strain(night)[0]
    data = MemoryChannel("OV-STRAIN", settings.strain_rate, settings.start * NS, strain)
    found = planted.find(data)
    table = planted.measured(data, found)
    table = table.assign(family=match(found, truth), snr=found["snr"], night=seed)
    return table[(table["family"] != "") & table["duration_s"].notna()]


def forest():
    """Give the forest that judges the features."""
    from sklearn.ensemble import RandomForestClassifier

    return RandomForestClassifier(
        400,
        class_weight="balanced_subsample",
        min_samples_leaf=2,
        oob_score=True,
        random_state=0,
        n_jobs=1,
    )


def report(train: pd.DataFrame, test: pd.DataFrame) -> None:
    """Print how well a forest from some nights sorts the others."""
    from sklearn.metrics import classification_report, f1_score

    model = forest().fit(train[list(NAMES)], train["family"])
    print(f"{len(train)} to train on, out-of-bag accuracy {model.oob_score_:.4f}")
    said = model.predict(test[list(NAMES)])
    for low, high in RANGES:
        part = ((test["snr"] >= low) & (test["snr"] < high)).to_numpy()
        truth = test["family"][part]
        score = f1_score(truth, said[part], average="macro", zero_division=0)
        print(f"\nSNR {low:g} to {high:g}: {part.sum()}, macro-F1 {score:.4f}")
        print(classification_report(truth, said[part], digits=3, zero_division=0))
    shape = [f.name for f in FEATURES if f.group != "context"]
    model = forest().fit(train[shape], train["family"])
    part = (test["snr"] >= RANGES[0][0]).to_numpy()
    score = f1_score(
        test["family"][part], model.predict(test[shape])[part], average="macro"
    )
    print(f"without the context group, SNR 8 on: macro-F1 {score:.4f}")


if __name__ == "__main__":
    words = sys.argv[1:]
    cut = words.index("--") if "--" in words else len(words)
    train_seeds = [int(w) for w in words[:cut]] or list(range(100, 106))
    test_seeds = [int(w) for w in words[cut + 1 :]] or [110, 111, 112]
    report(
        pd.concat([one_night(seed) for seed in train_seeds]),
        pd.concat([one_night(seed, noise_level=1.4) for seed in test_seeds]),
    )
