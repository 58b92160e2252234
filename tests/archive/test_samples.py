"""Samples stored with a run, by name."""

from __future__ import annotations

import h5py
import numpy as np
import pytest

from dunhamfit.archive.store import open_archive
from dunhamfit.errors import ArchiveProblem, UsageError


def test_what_goes_in_comes_out(path, rng):
    chain = rng.normal(size=(50, 8, 3))
    with open_archive(path, mode="a") as archive:
        archive.save_posterior(
            1,
            {
                "chain": chain,
                "accepted": np.array([True, False]),
                "seed": 12345678901,
                "names": ("Y10", "noise factor of \u00b5"),
                "sampler": "one line\nanother",
                "none": (),
            },
            units={"chain": "cm-1"},
        )
        assert [run.posterior for run in archive.runs()] == [True, False]
    with open_archive(path) as archive:
        found = archive.posterior(1)
        assert archive.file["runs/1/posterior/chain"].attrs["unit"] == "cm-1"
        archive.load(1)
    assert np.array_equal(found["chain"], chain)
    assert found["accepted"].tolist() == [1, 0] and found["seed"] == 12345678901
    assert found["names"] == ("Y10", "noise factor of \u00b5")
    assert found["sampler"] == "one line\nanother"
    assert len(found["none"]) == 0
    assert set(found) == {"chain", "accepted", "seed", "names", "sampler", "none"}


def test_later_samples_take_the_place_of_earlier_ones(path):
    with open_archive(path, mode="a") as archive:
        archive.save_posterior(1, {"chain": np.zeros(50_000), "old": 1})
        size = path.stat().st_size
        archive.save_posterior(1, {"chain": np.ones(50_000)})
        assert set(archive.posterior(1)) == {"chain"}
        assert archive.posterior(1)["chain"][0] == 1
    assert path.stat().st_size < 1.1 * size  # the room of the old ones is used again


def test_wrong_use(path):
    with open_archive(path, mode="a") as archive:
        with pytest.raises(UsageError, match="no samples yet; make them with 'dunhamfit sample'"):
            archive.posterior(1)
        with pytest.raises(UsageError, match="no run 8"):
            archive.save_posterior(8, {})
        for name in ("a/b", "", "..", "checksum", "1st"):
            with pytest.raises(UsageError, match="letters, digits and underscores"):
                archive.save_posterior(1, {name: 1.0})
        for content in (1j, {"a": 1}, [["a", "b"]], object(), b"bytes"):
            with pytest.raises(UsageError, match="must be an array of real numbers"):
                archive.save_posterior(1, {"x": content})
        assert not archive.runs()[0].posterior


def test_changed_samples_are_refused(path):
    with open_archive(path, mode="a") as archive:
        archive.save_posterior(1, {"chain": np.zeros(5)})
    with h5py.File(path, "r+") as file:
        file["runs/1/posterior/chain"][3] = 1
    with open_archive(path) as archive, pytest.raises(ArchiveProblem, match="does not agree with its checksum"):
        archive.posterior(1)
