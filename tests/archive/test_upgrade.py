"""Older formats are brought up to date step by step, in memory or in the new file; the old one is not touched."""

from __future__ import annotations

import h5py
import numpy as np
import pytest

from dunhamfit.archive import upgrade
from dunhamfit.archive.store import open_archive
from dunhamfit.archive.upgrade import open_current
from dunhamfit.errors import ArchiveProblem


@pytest.fixture
def old(path, monkeypatch):
    """The archive in two invented earlier formats: version -1 said `constants`, version 0 `numbers`, for `values`."""

    def first(file):
        for run in file["runs"].values():
            run.move("constants", "numbers")

    def second(file):
        for run in file["runs"].values():
            run.move("numbers", "values")

    monkeypatch.setattr(upgrade, "STEPS", {-1: first, 0: second})
    with h5py.File(path, "r+") as file:
        file.attrs.create("format_version", -1, dtype="<i8")
        for run in file["runs"].values():
            run.move("values", "constants")
    return path


def test_reading_leaves_the_file_alone(old, fit):
    whole = old.read_bytes()
    with open_archive(old) as archive:
        assert np.array_equal(archive.load(1).values, fit.values)
        assert np.array_equal(archive.load(1).residuals, fit.residuals)
        assert len(archive.runs()) == 2
    assert old.read_bytes() == whole


def test_a_new_run_brings_the_file_up_to_date(old, fit, monkeypatch):
    with open_archive(old, mode="a") as archive:
        assert archive.save(fit, parent=2) == 3
    monkeypatch.setattr(upgrade, "STEPS", {})
    with open_archive(old) as archive:
        assert np.array_equal(archive.load(1).values, fit.values)
    with h5py.File(old) as file:
        assert file.attrs["format_version"] == upgrade.FORMAT_VERSION
        assert file.attrs["written_by"].startswith("dunhamfit ")


def test_every_version_below_the_present_one_has_a_step():
    assert set(upgrade.STEPS) == set(range(1, upgrade.FORMAT_VERSION))


def test_a_version_that_never_was(path):
    with h5py.File(path, "r+") as file:
        file.attrs.create("format_version", -5, dtype="<i8")
    with pytest.raises(ArchiveProblem, match="format version -5 does not exist"):
        open_current(path)
