"""Models on disk."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import pandas as pd

from dq.errors import ModelError
from dq.families.model_file import model_bytes, model_from_bytes
from dq.families.sorter import FamilySorter
from dq.writers import write_atomically


def save_model(path: str | Path, sorter: FamilySorter, meta: dict[str, Any]) -> None:
    """Write a model beside its place and rename it; equal sorters, equal bytes.

    Parameters
    ----------
    path : str or Path
    sorter : FamilySorter
    meta : dict
        What JSON can hold; ``dq_version`` is added.

    Raises
    ------
    ModelError
        The sorter cannot be stored.
    OutputError
        The file cannot be written.
    """
    from dq import __version__

    data = model_bytes(sorter, {**meta, "dq_version": __version__})
    write_atomically(path, data)


def load_model(
    path: str | Path, features: Sequence[str] | None = None
) -> tuple[FamilySorter, dict[str, Any]]:
    """Read a model; nothing in the file is ever run.

    Parameters
    ----------
    path : str or Path
    features : sequence of str, optional
        Names and order that the caller measures; others are refused.

    Returns
    -------
    sorter : FamilySorter
    meta : dict

    Raises
    ------
    ModelError
    """
    from dq import __version__

    path = Path(path)
    try:
        data = path.read_bytes()
    except OSError as error:
        raise ModelError(
            f"cannot read model {str(path)!r}: {error.strerror}; check the path"
        ) from error
    return model_from_bytes(
        data, where=repr(str(path)), version=__version__, features=features
    )


def sort_transients(features: pd.DataFrame, model: str | Path) -> pd.DataFrame:
    """Sort a feature table with a model file.

    Parameters
    ----------
    features : pandas.DataFrame
        Feature columns in the order that they are measured in.
    model : str or Path

    Returns
    -------
    pandas.DataFrame
        ``family, probability, family_set, novelty``, index as ``features``.

    Raises
    ------
    ModelError
    """
    sorter, _ = load_model(model, features=list(features.columns))
    return sorter.decide(features)
