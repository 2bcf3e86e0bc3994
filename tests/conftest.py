"""Fixtures shared by all tests."""

import numpy as np
import pytest


@pytest.fixture
def rng():
    """Give a generator with a fixed seed."""
    return np.random.default_rng(20250101)


@pytest.fixture
def small_site(tmp_path):
    """Give a function that writes a small invented site under ``tmp_path``."""
    from small_site import write_site

    def build(folder="site", **changes):
        return write_site(tmp_path / folder, **changes)

    return build


@pytest.fixture
def tree_of():
    """Give a function that lists a folder's files with their bytes."""

    def read(path):
        return {
            str(p.relative_to(path)): p.read_bytes() if p.is_file() else None
            for p in sorted(path.rglob("*"))
        }

    return read
