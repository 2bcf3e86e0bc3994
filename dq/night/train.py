"""From hand labels to a model file and an honest report.

Features come from a ready table (a training set) or are measured at the labelled times.
Everything is computed before anything is written, the model last.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from dq.config import Config
from dq.errors import InputError, OutputError, TrainingError
from dq.families import (
    CHIRP_LIKE,
    FamilySorter,
    TrainingReport,
    make_report,
    save_model,
)
from dq.families.labels import check_family
from dq.night.labelled import measure_labelled
from dq.night.training_set import Examples, gather, read_features, with_chirps
from dq.store import read_labels

#: A family needs examples in this many blocks before anything measured of it counts.
_FEWEST_BLOCKS = 2


@dataclass(frozen=True)
class Training:
    """A finished training.

    Attributes
    ----------
    sorter : FamilySorter
    report : TrainingReport
    model, folder : Path
        The model file, and the report's folder beside it.
    notes : tuple of str
        What the reader should know first.
    """

    sorter: FamilySorter
    report: TrainingReport
    model: Path
    folder: Path
    notes: tuple[str, ...]


def train(
    config: Config,
    *,
    labels: str | Path,
    model: str | Path,
    features: str | Path | None = None,
    features_at: Callable[[Config, str, pd.DataFrame], pd.DataFrame] | None = None,
    feature_groups: dict[str, list[str]] | None = None,
    chirps: pd.DataFrame | None = None,
) -> Training:
    """Train a sorter, measure it, and write model and report.

    Parameters
    ----------
    config : Config
    labels : str or Path
        CSV: ``gps_time, channel, family, labeller``, optional ``comment, confidence``.
    model : str or Path
        File to write; the report goes into the folder ``<stem>_report`` beside it.
    features : str or Path, optional
        Ready feature table, CSV: ``gps_time``, any of ``ABOUT``, and one column per
        feature. Without it transients are found and measured at the labelled times.
    features_at : callable, optional
        ``features_at(config, channel, transients)`` gives the feature table, one row
        per transient; by default the night's own.
    feature_groups : dict, optional
        Features that belong together, for the report; by default the tool's own
        groups where all features are its own.
    chirps : pandas.DataFrame, optional
        Features of simulated chirps, which train and test the guard beside any that
        were labelled; by default they are planted into the data (``dq.night.guard``)
        unless the features come ready.

    Returns
    -------
    Training

    Raises
    ------
    InputError
        Labels or features cannot be used; nothing was written.
    OutputError
        The files cannot be written.
    """
    target = _check_target(Path(model))
    hand = _strain_labels(Path(labels), config.site.strain)
    if features is not None:
        table = read_features(Path(features))
    else:
        table, planted = measure_labelled(config, hand, features_at)
        chirps = planted if chirps is None else chirps
    examples = gather(hand, table, config.site.strain)
    if chirps is not None and len(chirps):
        examples = with_chirps(examples, chirps)
    sorter = FamilySorter().fit(
        examples.features,
        examples.family,
        groups=examples.groups,
        parent=examples.parent,
    )
    report = make_report(
        sorter,
        examples.features,
        times_s=examples.times_s,
        matched=examples.matched,
        feature_groups=feature_groups or _own_groups(examples),
    )
    notes = tuple(_notes(sorter, report))
    meta = _about(config, Path(labels), examples, report)
    folder = target.parent / f"{target.stem}_report"
    _write(folder, report, notes, config)
    save_model(target, sorter, meta)
    return Training(sorter, report, target, folder, notes)


def _own_groups(examples: Examples) -> dict[str, list[str]] | None:
    """Give the tool's groups of features, where the examples have all of them."""
    from dq.features import FEATURES

    if {f.name for f in FEATURES} != set(examples.features.columns):
        return None
    groups: dict[str, list[str]] = {}
    for feature in FEATURES:
        groups.setdefault(feature.group, []).append(feature.name)
    return groups


def _about(config: Config, labels: Path, examples: Examples, report) -> dict:
    """Give what the model file tells of its training."""
    figures = {k: float(f"{v:.6g}") for k, v in report.figures.items()}
    return {
        "site": config.site.name,
        "strain": config.site.strain,
        "examples": report.figures["examples"],
        "labels_sha256": _sha256_of_file(labels),
        "data_sha256": _sha256_of_table(examples),
        "figures": figures,
    }


def _strain_labels(path: Path, strain: str) -> pd.DataFrame:
    """Read labels and refuse names that no label may use, line by line."""
    hand = read_labels(path)
    for row in hand.itertuples():
        try:
            check_family(row.family)
        except TrainingError as error:
            raise TrainingError(
                f"labels {str(path)!r} line {row.line}: {error}"
            ) from error
    other = hand["channel"] != strain
    if other.all():
        raise TrainingError(
            f"labels {str(path)!r}: no label is of the strain channel {strain!r}; "
            f"the first is of {hand['channel'].iloc[0]!r}"
        )
    return hand


def _notes(sorter: FamilySorter, report: TrainingReport) -> list[str]:
    notes = []
    for row in report.families.itertuples():
        if row.blocks < _FEWEST_BLOCKS:
            notes.append(
                f"{row.family}: all {row.examples} examples lie in one block of time, "
                "so nothing could be measured of it; label more at other times"
            )
    if CHIRP_LIKE not in sorter.classes_:
        notes.append(
            f"no {CHIRP_LIKE} examples: the sorter has no guard of its own, and "
            "signals may be put into noise families"
        )
    if len(report.unmatched):
        count = len(report.unmatched)
        notes.append(
            f"{count} label{'s were' if count > 1 else ' was'} not used; unmatched.csv "
            "says why"
        )
    return notes


def _check_target(path: Path) -> Path:
    if not path.parent.is_dir():
        raise InputError(
            f"folder {str(path.parent)!r} of --model does not exist; make it first"
        )
    if path.is_dir():
        raise InputError(f"--model {str(path)!r} is a folder; give a file")
    return path


def _write(folder: Path, report: TrainingReport, notes, config: Config) -> None:
    from dq.report.training import training_page
    from dq.writers import write_atomically

    page = training_page(report, site=config.site.name, notes=notes)
    try:
        folder.mkdir(exist_ok=True)
    except OSError as error:
        raise OutputError(
            f"cannot make folder {str(folder)!r}: {error.strerror}; choose "
            "another --model"
        ) from error
    for name, table in report.tables().items():
        write_atomically(folder / f"{name}.csv", _csv(table, index=name == "confusion"))
    write_atomically(folder / "index.html", page)


def _csv(table: pd.DataFrame, *, index: bool) -> str:
    shown = table.copy()
    for name in shown.columns:
        if name == "gps_time":
            shown[name] = ["" if pd.isna(t) else f"{t:.6f}" for t in shown[name]]
        elif shown[name].dtype.kind == "f":
            shown[name] = ["" if pd.isna(v) else f"{v:.6g}" for v in shown[name]]
    return shown.to_csv(index=index, lineterminator="\n")


def _sha256_of_file(path: Path) -> str:
    return hashlib.sha256(path.read_bytes()).hexdigest()


def _sha256_of_table(examples: Examples) -> str:
    digest = hashlib.sha256()
    digest.update("\n".join(map(str, examples.features.columns)).encode())
    digest.update(np.ascontiguousarray(examples.features.to_numpy(float)).tobytes())
    digest.update("\n".join(examples.family).encode())
    digest.update(np.ascontiguousarray(examples.groups, dtype=np.int64).tobytes())
    return digest.hexdigest()
