"""Repeating runs from the file alone: agreement where nothing changed, a plain word where something did."""

from __future__ import annotations

import dataclasses
import math

import h5py
import numpy as np
import pytest
from invented_runs import all_lines, one_fit

from dunhamfit.archive.lineage import TOLERANCE, differences, repeat, verify
from dunhamfit.archive.runs import CHECKSUM, POSTERIOR, checksum_of
from dunhamfit.archive.schema import contents
from dunhamfit.archive.store import open_archive
from dunhamfit.errors import UsageError


def forge(path, change) -> None:
    """Change a run behind the back of the archive, checksum included."""
    with h5py.File(path, "r+") as file:
        change(file)
        for run in file["runs"].values():
            run[CHECKSUM][...] = checksum_of(contents(run, without=(POSTERIOR,)))


def checks(path, **options):
    with open_archive(path) as archive:
        return verify(archive, **options)


def test_every_run_agrees(path, rng):
    mixed = all_lines().subset(rng.permutation(len(all_lines())))
    with open_archive(path, mode="a") as archive:
        archive.save(one_fit("per-band"), parent=2)
        archive.save(one_fit("common", mixed))
        archive.save_posterior(3, {"draws": np.ones(4)})
    found = checks(path)
    assert [check.run for check in found] == [1, 2, 3, 4]
    assert all(check.agrees and not check.problems and check.difference <= TOLERANCE for check in found)


def test_another_processor_stays_within_the_tolerance(path, program, monkeypatch):
    """OpenBLAS, where it is the library in use, can be told to work as on another processor; others ignore it."""
    monkeypatch.setenv("OPENBLAS_CORETYPE", "Nehalem")
    monkeypatch.setenv("OPENBLAS_NUM_THREADS", "1")
    elsewhere = program(
        """
from dunhamfit.archive.lineage import verify
from dunhamfit.archive.store import open_archive
with open_archive(sys.argv[1]) as archive:
    print(*(check.agrees for check in verify(archive)))
""",
        path,
    )
    assert elsewhere.communicate(timeout=60)[0].split() == ["True", "True"]


@pytest.mark.parametrize(
    ("dataset", "size", "where"),
    [("values", 3e-10, "Y10"), ("factor", 1e-9, "sigma of "), ("noise/factors", 1e-9, "noise factor of oven")],
)
def test_a_result_that_does_not_follow_from_the_inputs(path, dataset, size, where):
    def change(file):
        file[f"runs/1/{dataset}"][0] *= 1 + size

    forge(path, change)
    first, second = checks(path)
    assert not first.agrees and first.where.startswith(where)
    assert size / 10 < first.difference < size * 10
    assert "when the run is repeated" in first.problems[0]
    assert second.agrees


def test_chi2_is_compared(path):
    def change(file):
        file["runs/1/statistics/chi2"][...] *= 1 + 1e-9

    forge(path, change)
    assert checks(path)[0].where == "chi2"


def test_a_changed_line_is_told_for_every_run_that_uses_it(path):
    with h5py.File(path, "r+") as file:
        next(iter(file["lines"].values()))["position"][0] += 1e-6
    for check in checks(path):
        assert not check.agrees and math.isnan(check.difference)
        assert "/lines/" in check.problems[0] and "has changed since it was stored" in check.problems[0]


def test_a_changed_result_is_told(path):
    with h5py.File(path, "r+") as file:
        file["runs/1/values"][0] += 1e-12 * file["runs/1/values"][0]
    first, second = checks(path)
    assert not first.agrees and "checksum" in first.problems[0]
    assert second.agrees


def test_changed_samples_are_told(path):
    with open_archive(path, mode="a") as archive:
        archive.save_posterior(2, {"draws": np.ones(4)})
    with h5py.File(path, "r+") as file:
        file["runs/2/posterior/draws"][1] = 2
    first, second = checks(path)
    assert first.agrees and not second.agrees and "posterior" in second.problems[0]


def test_a_parent_that_was_exchanged_is_told(path):
    def change(file):
        text = file["runs/1/inputs"].asstr()[()]
        file["runs/1/inputs"][...] = text.replace("an invented paper", "another paper")

    forge(path, change)
    first, second = checks(path)
    assert first.agrees
    assert "no longer the run it was made from" in second.problems[0]
    forge(path, lambda file: file.move("runs/1", "runs/5"))
    assert "its parent, run 1, is missing" in checks(path)[0].problems[0]


def test_other_routes_need_their_own_routine(path, fit):
    robust = dataclasses.replace(fit, robust="huber", line_weights=np.ones(len(fit.lines)))
    with open_archive(path, mode="a") as archive:
        archive.save(robust)
        archive.save(fit, origin={"route": "relations"})
        with pytest.raises(UsageError, match="run 4 is not a plain fit"):
            repeat(archive.stored(4))
    found = checks(path)
    assert [check.agrees for check in found] == [True, True, False, False]
    assert "robust loss 'huber'" in found[2].problems[0] and "'route': 'relations'" in found[3].problems[0]

    def refit(stored):
        return fit if stored.run > 2 else repeat(stored)

    assert all(check.agrees for check in checks(path, refit=refit))


def test_a_repeat_with_other_parameters_differs_without_bound(fit):
    other = one_fit("stated")
    assert max(differences(fit, other).values()) == math.inf
    assert max(differences(fit, fit).values()) == 0.0
    assert math.isnan(dataclasses.replace(fit, values=fit.values * math.nan).values[0])
    broken = dataclasses.replace(fit, values=fit.values * math.nan)
    assert any(math.isnan(value) for value in differences(fit, broken).values())
