"""Fixtures that every test may use."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

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
