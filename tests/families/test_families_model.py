"""Model files: equal bytes, nothing run, everything checked."""

import io
import json
import os
import pickle
import zipfile

import numpy as np
import pandas as pd
import pytest
from family_table import family_table

import dq
from dq.errors import ModelError, OutputError
from dq.families import FamilySorter, load_model, save_model, sort_transients
from dq.families.calibration import METHODS
from dq.families.model_file import model_bytes, model_from_bytes

META = {"site": "Orrin Vale", "labels_sha256": "0" * 64, "dq_version": dq.__version__}


@pytest.fixture(scope="module")
def table():
    return family_table(1, each=20)


def fit(table, **changes):
    x, y, groups = table
    return FamilySorter(n_trees=10, **changes).fit(x, y, groups=groups)


@pytest.fixture(scope="module")
def data(table):
    return model_bytes(fit(table), META)


def repacked(data, changes):
    """Give the model with some members replaced, or removed where None."""
    out = io.BytesIO()
    with (
        zipfile.ZipFile(io.BytesIO(data)) as old,
        zipfile.ZipFile(out, "w", zipfile.ZIP_DEFLATED) as new,
    ):
        for name in old.namelist():
            content = changes.get(name, old.read(name))
            if content is not None:
                new.writestr(name, content)
    return out.getvalue()


def head_with(data, **changes):
    with zipfile.ZipFile(io.BytesIO(data)) as archive:
        head = json.loads(archive.read("model.json"))
    return repacked(data, {"model.json": json.dumps({**head, **changes})})


def array_with(data, name, change):
    with zipfile.ZipFile(io.BytesIO(data)) as archive:
        array = np.load(io.BytesIO(archive.read(f"{name}.npy")))
    out = io.BytesIO()
    np.save(out, change(array))
    return repacked(data, {f"{name}.npy": out.getvalue()})


def read(data, **options):
    return model_from_bytes(data, where="'m'", **{"version": dq.__version__, **options})


@pytest.mark.parametrize("method", METHODS)
def test_what_is_read_decides_as_what_was_written(tmp_path, table, method):
    sorter = fit(table, calibration=method)
    save_model(tmp_path / "m", sorter, META)
    loaded, meta = load_model(tmp_path / "m", features=list(table[0].columns))
    later, _, _ = family_table(9, each=15)
    pd.testing.assert_frame_equal(sorter.decide(later), loaded.decide(later))
    np.testing.assert_array_equal(sorter.predict_set(later), loaded.predict_set(later))
    assert meta == META
    assert loaded.get_params() == sorter.get_params()
    pd.testing.assert_frame_equal(
        sort_transients(later, tmp_path / "m"), sorter.decide(later)
    )
    assert (tmp_path / "m").stat().st_size < 800_000


def test_the_same_labels_give_the_same_bytes(table, data):
    assert model_bytes(fit(table), META) == data
    assert model_bytes(read(data)[0], META) == data
    assert model_bytes(fit(table, random_state=1), META) != data


class Runs:
    """Makes a folder when it is unpickled."""

    def __init__(self, path):
        self.path = path

    def __reduce__(self):
        """Name the call that a careless reader would make."""
        return os.mkdir, (self.path,)


def test_a_pickle_is_refused_and_never_run(tmp_path, data):
    trap = str(tmp_path / "trap")
    bad = pickle.dumps(Runs(trap))
    (tmp_path / "m").write_bytes(bad)
    with pytest.raises(ModelError, match="is no model of dq train"):
        load_model(tmp_path / "m")
    objects = io.BytesIO()
    np.save(objects, np.array([Runs(trap)], dtype=object), allow_pickle=True)
    with pytest.raises(ModelError, match="damaged"):
        read(repacked(data, {"bars.npy": objects.getvalue()}))
    other = io.BytesIO()
    with zipfile.ZipFile(other, "w") as archive:
        archive.writestr("schema.json", json.dumps({"__class__": "os.system"}))
    with pytest.raises(ModelError, match=r"holds no model\.json"):
        read(other.getvalue())
    assert not os.path.exists(trap)


def test_other_versions_and_features_are_named(data):
    with pytest.raises(ModelError, match=r"trained with dq 0\.1\.0, this is 0\.2\.0"):
        read(head_with(data, meta={**META, "dq_version": "0.1.0"}), version="0.2.0")
    with pytest.raises(ModelError, match="layout 3, this version reads 2"):
        read(head_with(data, schema=3))
    names = [f"feature_{i:02d}" for i in range(24)]
    with pytest.raises(ModelError, match="needs 'feature_23', which is not measured"):
        read(data, features=names[:-1])
    with pytest.raises(ModelError, match="does not know 'glow'"):
        read(data, features=[*names, "glow"])
    with pytest.raises(ModelError, match="their order differs"):
        read(data, features=names[::-1])
    assert read(data, features=names)[1] == META


@pytest.mark.parametrize(
    ("name", "change"),
    [
        ("forest_left", lambda a: np.full_like(a, 10**8)),
        ("forest_right", lambda a: a * 0),
        ("strange_feature", lambda a: a + 99),
        ("strange_votes", lambda a: a[:, :1]),
        ("tail_known", lambda a: a[:2]),
        ("cloud_whiten", lambda a: a[1:]),
        ("forest_votes", lambda a: a[:, 1:]),
        ("bars", lambda a: a.astype("f4")),
        ("known_family", lambda a: a + 99),
        ("space_spread", lambda a: a[1:]),
    ],
)
def test_arrays_that_do_not_fit_are_refused(data, name, change):
    with pytest.raises(ModelError, match="damaged"):
        read(array_with(data, name, change))


@pytest.mark.parametrize(
    "change",
    [
        {"families": ["comb"]},
        {"families": ["unknown", "zebra"]},
        {"settings": {"speed": 3}},
        {"settings": {"alpha": 7.0}},
        {"calibration": "magic"},
        {"novelty_bar": -1.0},
        {"meta": {}},
    ],
)
def test_a_head_that_does_not_fit_is_refused(data, change):
    with pytest.raises(ModelError):
        read(head_with(data, **change))


def test_cut_and_missing_files(tmp_path, data):
    for broken in (data[: len(data) // 2], b"", repacked(data, {"bars.npy": None})):
        with pytest.raises(ModelError):
            read(broken)
    with pytest.raises(ModelError, match="cannot read model"):
        load_model(tmp_path / "absent")


def test_every_error_is_one_line(data):
    for broken in (b"x", head_with(data, schema=3), repacked(data, {"map.npy": None})):
        with pytest.raises(ModelError) as caught:
            read(broken)
        assert "\n" not in str(caught.value)
        assert caught.value.exit_code == 2


def test_a_sorter_without_names_has_no_file(table):
    x, y, groups = table
    bare = FamilySorter(n_trees=5).fit(x.to_numpy(), y, groups=groups)
    with pytest.raises(ModelError, match="feature names"):
        model_bytes(bare, META)


def test_a_full_disk_leaves_the_old_model(tmp_path, table):
    with pytest.raises(OutputError):
        save_model(tmp_path / "absent" / "m", fit(table), META)
