"""`levels` on the invented campaign."""

from __future__ import annotations

import csv
import json

import pytest
from campaign_archive import fitted_campaign

from dunhamfit.archive.store import open_archive
from dunhamfit.cli.main import main
from dunhamfit.results.levels import energy_levels


@pytest.fixture(scope="module")
def archive(tmp_path_factory):
    return fitted_campaign(tmp_path_factory.mktemp("campaign"))


def test_json_and_csv_are_what_the_interface_gives(archive, tmp_path, capsys):
    capsys.readouterr()
    arguments = ["levels", str(archive), "--vmax", "2", "--jmax", "6", "--isotopologue", "30Si32S"]
    assert main([*arguments, "--json"]) == 0
    document = json.loads(capsys.readouterr().out)
    with open_archive(archive) as store:
        expected = energy_levels(store.latest(), v_max=2, j_max=6, isotopologue="30Si32S").records()
    assert document["levels"] == expected
    assert document["zero"].startswith("v = 0, J = 0")
    assert main([*arguments, "-o", str(tmp_path / "levels.csv"), "--quiet"]) == 0
    with open(tmp_path / "levels.csv", newline="") as file:
        rows = list(csv.DictReader(file))
    assert [float(row["energy"]) for row in rows] == [item["energy"] for item in expected]


def test_table_with_validity(archive, capsys):
    capsys.readouterr()
    assert main(["levels", str(archive), "--jmax", "2", "--unit", "GHz", "--tolerance", "1e-4"]) == 0
    text = " ".join(capsys.readouterr().out.split())
    assert "Energy levels above v = 0, J = 0" in text
    assert "GHz" in text
    assert "highest J observed" in text


def test_wavelengths_are_refused(archive, capsys):
    capsys.readouterr()
    assert main(["levels", str(archive), "--unit", "um"]) == 2
    assert "um" in capsys.readouterr().err


def test_covariance_on_request(archive, capsys):
    capsys.readouterr()
    assert main(["levels", str(archive), "--vmax", "1", "--jmax", "2", "--json", "--covariance"]) == 0
    document = json.loads(capsys.readouterr().out)
    sigmas = [item["sigma"] for item in document["levels"]]
    assert [row[i] ** 0.5 for i, row in enumerate(document["covariance"])] == pytest.approx(sigmas, rel=1e-9)
