"""Fixtures shared by all tests."""

import os

# Before numpy is loaded: one thread a process, so that parallel tests share a
# machine, and the same results everywhere.
for _variable in (
    "OMP_NUM_THREADS",
    "OPENBLAS_NUM_THREADS",
    "MKL_NUM_THREADS",
    "NUMBA_NUM_THREADS",
):
    os.environ.setdefault(_variable, "1")

import numpy as np  # noqa: E402
import pytest  # noqa: E402

DEFAULT_SEED = 20260117


@pytest.fixture
def rng():
    """A seeded generator; LATELIGHT_TEST_SEED hunts for rare failures."""
    return np.random.default_rng(
        int(os.environ.get("LATELIGHT_TEST_SEED", DEFAULT_SEED))
    )
