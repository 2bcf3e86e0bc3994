"""Every configuration that the project ships loads."""

from pathlib import Path

import pytest

from dq.config import load_config

CONFIGS = sorted((Path(__file__).parents[1] / "configs").glob("*.toml"))


def test_there_are_examples():
    assert CONFIGS


@pytest.mark.parametrize("path", CONFIGS, ids=lambda p: p.name)
def test_example_loads(path):
    assert load_config(path).site.strain
