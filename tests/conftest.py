"""Shared by all tests: one fixed seed, and one folder for compiled programs."""

import numpy as np
import pytest

SEED = 20260  # one named seed; the tests do not depend on its value


@pytest.fixture
def rng() -> np.random.Generator:
    """A generator that starts the same in every test."""
    return np.random.default_rng(SEED)


@pytest.fixture(scope="session", autouse=True)
def compiled_programs(tmp_path_factory):
    """Keep the user's cache out of the tests; subprocesses share what is compiled here."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("SHAPER_CACHE", str(tmp_path_factory.mktemp("compiled")))
        yield
