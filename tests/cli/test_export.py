"""`export`: what it writes reads back to the same fit, and nothing that differs is written over."""

from __future__ import annotations

import csv
import json
import shutil
from importlib.resources import files
from pathlib import Path

import numpy as np
import pytest

from dunhamfit.cli.main import main


@pytest.fixture(scope="module")
def exported(tmp_path_factory) -> Path:
    """The invented campaign, fitted and exported."""
    folder = tmp_path_factory.mktemp("campaign")
    for source in (Path(str(files("dunhamfit"))) / "examples" / "campaign").iterdir():
        shutil.copy(source, folder)
    assert main(["fit", str(folder / "sis.toml"), "--quiet"]) == 0
    assert main(["export", str(folder / "sis.h5"), "--to", str(folder / "out"), "--quiet"]) == 0
    return folder / "out"


def test_the_written_job_makes_the_same_fit(exported, tmp_path, capsys):
    capsys.readouterr()
    assert main(["fit", str(exported / "job.toml"), "-o", str(tmp_path / "again.h5"), "--json", "--quiet"]) == 0
    again = json.loads(capsys.readouterr().out)
    first = json.loads((exported / "constants.json").read_text())
    for new, old in zip(again["constants"], first["constants"], strict=True):
        assert new["name"] == old["name"]
        # Positions are written as the doubles they are, so nothing but rounding may differ.
        assert abs(new["value"] - old["value"]) <= 1e-10 * max(abs(old["value"]), old["sigma"])
        assert new["sigma"] == pytest.approx(old["sigma"], rel=1e-10)
    assert again["counts"] == first["counts"]
    assert again["excluded"][0]["reason"] == first["excluded"][0]["reason"]


def test_tables_of_numbers_agree_with_each_other(exported):
    document = json.loads((exported / "constants.json").read_text())
    with open(exported / "constants.csv", newline="") as file:
        rows = list(csv.DictReader(file))
    assert [float(row["value"]) for row in rows] == [item["value"] for item in document["constants"]]
    with open(exported / "covariance.csv", newline="") as file:
        matrix = np.array([[float(cell) for cell in row[1:]] for row in list(csv.reader(file))[1:]])
    count = len(rows)
    assert np.array_equal(matrix[:count, :count], np.array(document["covariance"]))


def test_residuals_are_observed_less_calculated(exported):
    with open(exported / "lines-2-furnace.csv", newline="") as file:
        rows = list(csv.DictReader(file))
    assert sum(row["flag"] == "excluded" for row in rows) == 2
    for row in rows:
        difference = float(row["position"]) - float(row["calculated"])
        # One rounding of a position near 700 cm-1.
        assert float(row["obs_minus_calc"]) == pytest.approx(difference, abs=2e-13)


def test_a_file_that_differs_is_not_written_over(exported, capsys):
    target = exported / "tables.txt"
    before = target.read_text(encoding="utf-8")
    target.write_text("mine", encoding="utf-8")
    archive = exported.parent / "sis.h5"
    try:
        assert main(["export", str(archive), "--to", str(exported)]) == 2
        assert "tables.txt is there and differs" in capsys.readouterr().err
        assert target.read_text(encoding="utf-8") == "mine"
    finally:
        target.write_text(before, encoding="utf-8")
