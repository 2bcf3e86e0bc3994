"""Fixtures shared by all tests."""

import numpy as np
import pytest


@pytest.fixture
def rng():
    """Give a generator with a fixed seed."""
    return np.random.default_rng(20250101)
