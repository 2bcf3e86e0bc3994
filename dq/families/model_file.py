"""A sorter as bytes that run no code, and back.

A model is a zip archive of plain arrays (``.npy`` without objects) and one JSON text.
Nothing in it names a type or a function; every array's kind, shape and indices are
checked before it is used. Equal sorters give equal bytes, and the library version that
grew the trees does not matter when they are read.
"""

from __future__ import annotations

import io
import json
import zipfile
from collections.abc import Sequence
from typing import Any

import numpy as np

from dq.errors import ModelError
from dq.families.calibration import METHODS, VoteMap
from dq.families.clouds import Clouds
from dq.families.forest import Forest
from dq.families.labels import check_family
from dq.families.novelty import Signs, Tails
from dq.families.sorter import FamilySorter
from dq.families.space import Space

#: Version of the layout; another one is refused.
SCHEMA = 2

_HEAD = "model.json"

#: Zip archives cannot tell earlier dates; a fixed one keeps equal models equal.
_DATE = (1980, 1, 1, 0, 0, 0)

#: Bytes that a model may unpack to: a forest of 1000 trees on 20 000 examples of 20
#: families takes a tenth.
_LARGEST = 2**31

_FOREST_KINDS = {
    "roots": "i4",
    "feature": "i4",
    "threshold": "f8",
    "left": "i4",
    "right": "i4",
    "missing_left": "b1",
    "votes": "f4",
}


def model_bytes(sorter: FamilySorter, meta: dict[str, Any]) -> bytes:
    """Pack a fitted sorter.

    Parameters
    ----------
    sorter : FamilySorter
        Trained on a table with column names and families that are texts.
    meta : dict
        What JSON can hold; ``dq_version`` is required. It must not hold a time of day,
        or equal trainings would differ.

    Returns
    -------
    bytes

    Raises
    ------
    ModelError
        The sorter has no feature names or its families are no texts.
    """
    names = getattr(sorter, "feature_names_in_", None)
    if names is None or sorter.classes_.dtype.kind not in "UO":
        raise ModelError(
            "a model file needs feature names and families that are texts; train on a "
            "DataFrame"
        )
    head = {
        "format": "dq family sorter",
        "schema": SCHEMA,
        "features": [str(n) for n in names],
        "families": [str(f) for f in sorter.classes_],
        "settings": sorter.get_params(),
        "calibration": sorter.map_.method,
        "calibration_scores": sorter.calibration_scores_,
        "novelty_bar": sorter.novelty_bar_,
        "meta": meta,
    }
    arrays = {
        "map": sorter.map_.parameters,
        "bars": sorter.bars_,
        "importance": sorter.importance_,
        "ranks": sorter.signs_.clouds.table,
        "cloud_centre": sorter.signs_.clouds.centre,
        "cloud_whiten": sorter.signs_.clouds.whiten,
        "tail_middle": sorter.tails_.middle,
        "tail_spread": sorter.tails_.spread,
        "tail_known": sorter.tails_.known,
        "space_centre": sorter.space_.centre,
        "space_spread": sorter.space_.spread,
        "known": sorter.known_,
        "known_family": sorter.known_family_,
    }
    for prefix, forest in (
        ("forest", sorter.forest_),
        ("strange", sorter.signs_.forest),
    ):
        for name, kind in _FOREST_KINDS.items():
            arrays[f"{prefix}_{name}"] = getattr(forest, name).astype(kind, copy=False)
    stream = io.BytesIO()
    with zipfile.ZipFile(stream, "w", zipfile.ZIP_DEFLATED) as archive:
        text = json.dumps(head, sort_keys=True, indent=1, ensure_ascii=False)
        _add(archive, _HEAD, text.encode())
        for name, array in arrays.items():
            packed = io.BytesIO()
            np.lib.format.write_array(
                packed, np.ascontiguousarray(array), version=(1, 0)
            )
            _add(archive, f"{name}.npy", packed.getvalue())
    return stream.getvalue()


def _add(archive: zipfile.ZipFile, name: str, data: bytes) -> None:
    entry = zipfile.ZipInfo(name, _DATE)
    entry.compress_type = zipfile.ZIP_DEFLATED
    entry.external_attr = 0o644 << 16
    archive.writestr(entry, data)


def model_from_bytes(
    data: bytes, *, where: str, version: str, features: Sequence[str] | None = None
) -> tuple[FamilySorter, dict[str, Any]]:
    """Unpack a sorter and check every part of it.

    Parameters
    ----------
    data : bytes
    where : str
        Names the model in an error, for instance its path.
    version : str
        The running version of dq; its first two numbers must be the model's, since
        features may be measured otherwise in another.
    features : sequence of str, optional
        Names and order that the caller measures.

    Returns
    -------
    sorter : FamilySorter
    meta : dict
        As given to :func:`model_bytes`.

    Raises
    ------
    ModelError
        No model, another layout or version, other features, or a damaged or untrusted
        part.
    """
    try:
        with zipfile.ZipFile(io.BytesIO(data)) as archive:
            size = sum(entry.file_size for entry in archive.infolist())
            if size > _LARGEST:
                raise ModelError(
                    f"model {where} unpacks to {size} bytes, more than {_LARGEST}"
                )
            head = _head(archive, where, version)
            _check_features(head, where, features)
            arrays = _Arrays(archive, where)
            return _sorter(head, arrays, where), head["meta"]
    except (zipfile.BadZipFile, zipfile.LargeZipFile, EOFError) as error:
        raise ModelError(
            f"{where} is no model of dq train ({error}); it is not read, since "
            "other formats can run code"
        ) from error
    except (
        KeyError,
        TypeError,
        ValueError,
        NotImplementedError,
        RuntimeError,
    ) as error:
        if isinstance(error, ModelError):
            raise
        raise ModelError(
            f"model {where} is damaged: {error}; train it again"
        ) from error


def _head(archive: zipfile.ZipFile, where: str, version: str) -> dict:
    if _HEAD not in archive.namelist():
        raise ModelError(
            f"{where} is no model of dq train: it holds no {_HEAD}; other formats are "
            "not read, since they can run code"
        )
    head = json.loads(archive.read(_HEAD))
    if head.get("schema") != SCHEMA:
        raise ModelError(
            f"model {where} has layout {head.get('schema')!r}, this version reads "
            f"{SCHEMA}; train it again"
        )
    made = str(head["meta"]["dq_version"])
    if made.split(".")[:2] != version.split(".")[:2]:
        raise ModelError(
            f"model {where} was trained with dq {made}, this is {version}, which may "
            "measure features otherwise; train it again"
        )
    return head


def _check_features(head: dict, where: str, features: Sequence[str] | None) -> None:
    if features is None:
        return
    trained, given = list(head["features"]), list(features)
    if trained == given:
        return
    lacking = [n for n in trained if n not in given]
    extra = [n for n in given if n not in trained]
    what = (
        f"it needs {lacking[0]!r}, which is not measured"
        if lacking
        else f"it does not know {extra[0]!r}"
        if extra
        else "their order differs"
    )
    raise ModelError(
        f"model {where} was trained on other features: {what}; train it again"
    )


class _Arrays:
    """Reads arrays by name, each with its expected kind and shape."""

    def __init__(self, archive: zipfile.ZipFile, where: str):
        self.archive, self.where = archive, where

    def get(self, name: str, kind: str, shape: tuple[int | None, ...]) -> np.ndarray:
        packed = io.BytesIO(self.archive.read(f"{name}.npy"))
        array = np.lib.format.read_array(packed, allow_pickle=False)
        fits = array.ndim == len(shape) and all(
            want in (None, have) for want, have in zip(shape, array.shape, strict=True)
        )
        if array.dtype != np.dtype(kind) or not fits:
            raise ModelError(
                f"model {self.where} is damaged: array {name!r} is {array.dtype} "
                f"{array.shape}, expected {kind} {shape}; train it again"
            )
        return array

    def forest(self, prefix: str, features: int, families: int) -> Forest:
        shapes = {"votes": (None, families)}
        forest = Forest(
            **{
                name: self.get(f"{prefix}_{name}", kind, shapes.get(name, (None,)))
                for name, kind in _FOREST_KINDS.items()
            }
        )
        fault = forest.faults(features)
        if fault:
            raise ModelError(
                f"model {self.where} is damaged: {prefix} has {fault}; train it again"
            )
        return forest


def _sorter(head: dict, arrays: _Arrays, where: str) -> FamilySorter:
    features, families = len(head["features"]), len(head["families"])
    for name in head["families"]:
        check_family(name)
    if families < 2 or head["families"] != sorted(set(head["families"])):
        raise ModelError(f"model {where} is damaged: its families are not sorted")
    sorter = FamilySorter(**head["settings"])
    sorter.check_settings()
    sorter.classes_ = np.array(head["families"])
    sorter.feature_names_in_ = np.array(head["features"], dtype=object)
    sorter.n_features_in_ = features
    sorter.forest_ = arrays.forest("forest", features, families)
    sorter.signs_, sorter.tails_ = _novelty(arrays, features, families)
    sorter.novelty_bar_ = float(head["novelty_bar"])
    sorter.map_ = _map(head["calibration"], arrays, families)
    sorter.calibration_scores_ = dict(head["calibration_scores"])
    sorter.bars_ = arrays.get("bars", "f8", (families,))
    sorter.importance_ = arrays.get("importance", "f8", (features,))
    sorter.space_ = Space(
        arrays.get("space_centre", "f8", (features,)),
        arrays.get("space_spread", "f8", (features,)),
    )
    sorter.known_ = arrays.get("known", "f4", (None, features))
    sorter.known_family_ = arrays.get("known_family", "i4", (len(sorter.known_),))
    wrong = (sorter.known_family_ < 0) | (sorter.known_family_ >= families)
    if wrong.any() or not sorter.novelty_bar_ > 0:
        raise ModelError(f"model {where} is damaged: an example of no family")
    sorter.out_of_fold_ = None
    return sorter


def _novelty(arrays: _Arrays, features: int, families: int) -> tuple[Signs, Tails]:
    clouds = Clouds(
        arrays.get("ranks", "f8", (features, None)),
        arrays.get("cloud_centre", "f8", (families, features)),
        arrays.get("cloud_whiten", "f8", (families, features, features)),
    )
    tails = Tails(
        arrays.get("tail_middle", "f8", (families,)),
        arrays.get("tail_spread", "f8", (families,)),
        arrays.get("tail_known", "f8", (3, None)),
    )
    if not tails.known.shape[1] or clouds.table.shape[1] < 2:
        raise ModelError(f"model {arrays.where} is damaged: no known examples")
    return Signs(clouds, arrays.forest("strange", features, 2)), tails


def _map(method: str, arrays: _Arrays, families: int) -> VoteMap:
    shapes = {
        "none": (0,),
        "temperature": (1,),
        "platt": (families, 2),
        "beta": (families, 3),
        "isotonic": (families, 2, None),
    }
    if method not in METHODS:
        raise ModelError(f"model {arrays.where} is damaged: calibration {method!r}")
    return VoteMap(method, arrays.get("map", "f8", shapes[method]))
