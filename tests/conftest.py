"""Fixtures that every test may use."""

from __future__ import annotations

import os
from pathlib import Path

# Small matrices gain nothing from threads, and two processes that each start some hinder each other.
for _name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(_name, "1")

import numpy as np  # noqa: E402
import pytest  # noqa: E402
from hypothesis import settings  # noqa: E402

# The same examples on every run, and no clock: a test must not fail for the machine's sake. To search for
# new examples: pytest --hypothesis-profile=search
settings.register_profile("repeatable", derandomize=True, deadline=None)
settings.register_profile("search", deadline=None, max_examples=2000)
settings.load_profile("repeatable")

SHARED = Path(__file__).resolve().parents[2] / "shared" / "reference"


@pytest.fixture(scope="session")
def shared_reference() -> Path:
    """Folder of published reference data beside the checkout; tests skip where it is missing."""
    if not SHARED.is_dir():
        pytest.skip("the reference folder is not beside this checkout")
    return SHARED


@pytest.fixture
def rng() -> np.random.Generator:
    """A generator with a fixed seed, one for each test."""
    return np.random.default_rng(20260101)
