"""From hand labels to a model file and an honest report.

Features come from a ready table (a training set) or are measured at the labelled times.
Everything is computed before anything is written, the model last.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable
from dataclasses import dataclass, replace
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
    match_labels,
    save_model,
    time_groups,
)
from dq.families.labels import Matched, check_family
from dq.store import read_labels

#: Columns of a feature table that are no features.
ABOUT = (
    "transient_id",
    "channel",
    "gps_time",
    "gps_start",
    "gps_end",
    "snr",
    "parent",
    "block",
)

#: Seconds around a label in which transients are found: the neighbourhood that
#: features look at reaches 30 s.
_AROUND_S = 32

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


@dataclass(frozen=True)
class Examples:
    """What a sorter is trained on: one row per example or replanted copy.

    Attributes
    ----------
    features : pandas.DataFrame
        Feature columns only.
    family : ndarray of str
    times_s : ndarray
    groups : ndarray of int
    parent : ndarray of int
        Row of the example that a copy was made from; -1 for an example.
    matched : Matched
    """

    features: pd.DataFrame
    family: np.ndarray
    times_s: np.ndarray
    groups: np.ndarray
    parent: np.ndarray
    matched: Matched


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
        Features that belong together, for the report.
    chirps : pandas.DataFrame, optional
        Features of simulated chirps (``dq.families.chirp_waveform``), which train and
        test the guard beside any that were labelled.

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
        table = _measured(config, hand, features_at or _night_features)
    examples = gather(hand, table, config.site.strain)
    if chirps is not None:
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
        feature_groups=feature_groups,
    )
    notes = tuple(_notes(sorter, report))
    meta = {
        "site": config.site.name,
        "strain": config.site.strain,
        "examples": len(sorter.out_of_fold_.rows),
        "labels_sha256": _sha256_of_file(Path(labels)),
        "data_sha256": _sha256_of_table(examples),
        "figures": {k: float(f"{v:.6g}") for k, v in report.figures.items()},
    }
    folder = target.parent / f"{target.stem}_report"
    _write(folder, report, notes, config)
    save_model(target, sorter, meta)
    return Training(sorter, report, target, folder, notes)


def gather(hand: pd.DataFrame, table: pd.DataFrame, strain: str) -> Examples:
    """Match labels to the transients of a feature table and put examples together.

    Labels of other channels than the strain are listed as unmatched.

    Raises
    ------
    TrainingError
        No label finds a transient, or a copy names no labelled parent.
    """
    table = table.sort_values("gps_time", kind="stable").reset_index(drop=True)
    names = [c for c in table.columns if c not in ABOUT]
    copies = _text(table, "parent") != ""
    own = table[~copies].reset_index(drop=True)
    other = hand[hand["channel"] != strain]
    matched = match_labels(hand[hand["channel"] == strain], own)
    if len(other):
        listed = other.assign(reason=f"its channel is not the strain, {strain}")
        unmatched = pd.concat([matched.unmatched, listed], ignore_index=True)
        matched = replace(matched, unmatched=unmatched)
    if not len(matched.matched):
        raise TrainingError(
            f"none of {len(hand)} labels lies at a transient; compare their times with "
            "the feature table or the data"
        )
    rows = own.iloc[matched.matched["transient"].to_numpy()]
    family = matched.matched["family"].to_numpy(object)
    parent = np.full(len(rows), -1)
    if copies.any():
        place = {t: i for i, t in enumerate(_text(rows, "transient_id"))}
        more = table[copies]
        known = [t in place for t in _text(more, "parent")]
        more = more[known]
        of = np.array([place[t] for t in _text(more, "parent")], dtype=np.int64)
        rows = pd.concat([rows, more])
        family = np.concatenate([family, family[of]])
        parent = np.concatenate([parent, of])
    times = rows["gps_time"].to_numpy(float)
    block = rows["block"] if "block" in rows else time_groups(times)
    return Examples(
        features=rows[names].astype(float).reset_index(drop=True),
        family=family.astype(str),
        times_s=times,
        groups=pd.factorize(block)[0],
        parent=parent,
        matched=matched,
    )


def with_chirps(examples: Examples, chirps: pd.DataFrame) -> Examples:
    """Add simulated chirps, each a block of time of its own.

    Raises
    ------
    TrainingError
        Their features are not those of the examples.
    """
    names = list(examples.features.columns)
    if list(chirps.columns) != names:
        raise TrainingError(
            f"simulated chirps have {len(chirps.columns)} features where the examples "
            f"have {len(names)}, or in another order; measure both alike"
        )
    count, first = len(chirps), int(examples.groups.max()) + 1
    return replace(
        examples,
        features=pd.concat(
            [examples.features, chirps.astype(float)], ignore_index=True
        ),
        family=np.concatenate([examples.family, np.full(count, CHIRP_LIKE)]),
        times_s=np.concatenate([examples.times_s, np.full(count, np.nan)]),
        groups=np.concatenate([examples.groups, first + np.arange(count)]),
        parent=np.concatenate([examples.parent, np.full(count, -1)]),
    )


def _text(table: pd.DataFrame, column: str) -> np.ndarray:
    if column not in table:
        return np.full(len(table), "", dtype=object)
    return table[column].fillna("").astype(str).to_numpy(object)


def read_features(path: Path) -> pd.DataFrame:
    """Read a ready feature table.

    Raises
    ------
    InputError
        It cannot be read, has no times or no features, or a cell is no number.
    """
    try:
        table = pd.read_csv(path, dtype={c: str for c in ABOUT if c[:3] != "gps"})
    except OSError as error:
        raise InputError(
            f"cannot read features {str(path)!r}: {error.strerror}; check the path"
        ) from error
    except (ValueError, pd.errors.ParserError) as error:
        raise InputError(f"features {str(path)!r} are no CSV table: {error}") from error
    if "gps_time" not in table:
        raise InputError(f"features {str(path)!r}: column 'gps_time' is missing")
    names = [c for c in table.columns if c not in ABOUT]
    if not names:
        raise InputError(f"features {str(path)!r} hold no feature column")
    for name in [c for c in table.columns if c in names or c[:3] == "gps"]:
        numbers = pd.to_numeric(table[name], errors="coerce")
        wrong = numbers.isna() & table[name].notna()
        wrong |= numbers.isin([np.inf, -np.inf])
        if name == "gps_time":
            wrong |= numbers.isna()
        if wrong.any():
            line = int(np.flatnonzero(wrong)[0])
            raise InputError(
                f"features {str(path)!r} line {line + 2}: {name} = "
                f"{table[name].iloc[line]!r} is no finite number"
            )
        table[name] = numbers.astype(float)
    return table


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


def _measured(config: Config, hand: pd.DataFrame, features_at) -> pd.DataFrame:
    """Find the transients near the labels and measure them."""
    from dq.night.find import find_in_channel

    strain = config.site.strain
    parts = [
        find_in_channel(config, strain, start=first, end=last).transients
        for first, last in _stretches(
            hand.loc[hand["channel"] == strain, "gps_time"].to_numpy(float)
        )
    ]
    transients = pd.concat(parts, ignore_index=True)
    found = features_at(config, strain, transients)
    about = transients[["gps_time", "gps_start", "gps_end"]].reset_index(drop=True)
    table = pd.concat([about, found.reset_index(drop=True)], axis=1)
    measured = found.notna().any(axis=1).to_numpy()
    return table[measured]


def _stretches(times: np.ndarray) -> list[tuple[int, int]]:
    """Merge the seconds around the labels into stretches."""
    out: list[tuple[int, int]] = []
    for t in np.sort(times):
        first, last = int(np.floor(t)) - _AROUND_S, int(np.ceil(t)) + _AROUND_S
        if out and first <= out[-1][1]:
            out[-1] = (out[-1][0], max(last, out[-1][1]))
        else:
            out.append((max(first, 0), last))
    return out


def _night_features(config: Config, channel: str, transients) -> pd.DataFrame:
    """Measure transients as a night does."""
    # TO FINISH WITH THE FEATURE STAGE: the only tie between training and features
    from dq.night.inputs import read_inputs

    try:
        from dq.night.strain_features import measure_transients
    except ImportError as error:
        raise InputError(
            "this version measures no features at labelled times; give a ready table "
            "with --features"
        ) from error
    inputs = read_inputs(config)
    row = inputs.strain
    found = measure_transients(
        inputs.store.channel(channel),
        transients,
        ready=inputs.wanted,
        config=config,
        f_low_hz=row.f_low_hz,
        f_high_hz=row.f_high_hz,
    )
    return found.table


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
