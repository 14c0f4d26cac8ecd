"""Shared by all tests: one fixed seed, float64 JAX."""

import numpy as np
import pytest

SEED = 20260  # one named seed; the tests do not depend on its value


@pytest.fixture
def rng() -> np.random.Generator:
    """A generator that starts the same in every test."""
    return np.random.default_rng(SEED)
