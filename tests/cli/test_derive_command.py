"""`derive` on the invented campaign."""

from __future__ import annotations

import csv
import json

import numpy as np
import pytest
from campaign_archive import fitted_campaign

from dunhamfit.archive.store import open_archive
from dunhamfit.cli.main import main
from dunhamfit.results.derived import derive


@pytest.fixture(scope="module")
def archive(tmp_path_factory):
    return fitted_campaign(tmp_path_factory.mktemp("campaign"))


def test_json_is_what_the_interface_gives(archive, capsys):
    capsys.readouterr()
    assert main(["derive", str(archive), "--isotopologue", "29Si32S", "--json"]) == 0
    document = json.loads(capsys.readouterr().out)
    with open_archive(archive) as store:
        derived = derive(store.latest(), "29Si32S")
    found = {item["name"]: item for item in document["constants"]}
    for item in derived.items:
        assert (found[item.name]["value"], found[item.name]["sigma"]) == (item.value, item.sigma)
        assert {"name", "value", "sigma", "unit", "definition"} <= set(found[item.name])
    # 1 cm-1 = 29979.2458 MHz.
    assert found["B_e"]["value_MHz"] == pytest.approx(found["B_e"]["value"] * 29979.2458, rel=1e-15)
    assert found["r_e"]["value_MHz"] is None
    sigmas = np.sqrt(np.diag(document["covariance"]))
    assert sigmas == pytest.approx([item["sigma"] for item in document["constants"]], rel=1e-9)
    sigmas = np.sqrt(np.diag(document["own_covariance"]))
    assert sigmas == pytest.approx([item["sigma"] for item in document["own"]], rel=1e-9)
    assert {item["name"] for item in document["mass_independent"]} > {"U10", "U01", "Delta10_Si", "Delta01_S"}
    assert {item["name"] for item in document["levels"]} >= {"G", "origin", "B", "D"}


def test_truth_of_the_campaign_lies_within_the_error_bars(archive, capsys):
    """The campaign was made with known constants: each within 4 sigma."""
    capsys.readouterr()
    assert main(["derive", str(archive), "--json"]) == 0
    found = {item["name"]: item for item in json.loads(capsys.readouterr().out)["own"]}
    truth = json.loads((archive.parent / "truth.json").read_text())["terms"]
    assert set(truth) == set(found)
    for name, value in truth.items():
        assert abs(found[name]["value"] - value) < 4 * found[name]["sigma"]


def test_tables_and_csv(archive, tmp_path, capsys):
    capsys.readouterr()
    assert main(["derive", str(archive), "--isotopologue", "30Si34S", "--vmax", "2"]) == 0
    text = " ".join(capsys.readouterr().out.split())
    for part in ("Derived constants of 30Si34S", "omega_e x_e = -Y20", "Vibrational levels", "Delta10_Si", "r_e (BO)"):
        assert part in text
    assert main(["derive", str(archive), "-o", str(tmp_path / "derived.csv"), "--quiet"]) == 0
    with open(tmp_path / "derived.csv", newline="") as file:
        rows = {row["name"]: row for row in csv.DictReader(file)}
    assert float(rows["D_e"]["value"]) > 0
    assert rows["r_e"]["unit"] == "A"


def test_turning_points_on_request(archive, capsys):
    capsys.readouterr()
    assert main(["derive", str(archive), "--turning-points", "--vmax", "3", "--json"]) == 0
    document = json.loads(capsys.readouterr().out)
    assert [item["v"] for item in document["turning_points"]] == [0, 1, 2, 3]
    assert all(item["r_min"] < item["r_max"] for item in document["turning_points"])
    assert len(document["potential"]["r"]) == len(document["potential"]["energy"])
    # The first-order method leaves out what Dunham's correction of omega_e (0.005 cm-1 here) stands for, per quantum.
    assert max(map(abs, document["potential_check"]["origin"])) < 4 * 0.006
    assert main(["derive", str(archive), "--turning-points", "--vmax", "2"]) == 0
    assert "Turning points of 28Si32S" in capsys.readouterr().out
