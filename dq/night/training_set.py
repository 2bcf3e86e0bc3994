"""A training set: a feature table, labels matched to it, and the examples they make."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
import pandas as pd

from dq.errors import InputError, TrainingError
from dq.families import CHIRP_LIKE, match_labels, time_groups
from dq.families.labels import Matched

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
