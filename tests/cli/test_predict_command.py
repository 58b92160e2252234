"""`predict` on the invented campaign: the same numbers as the Python interface, in every form."""

from __future__ import annotations

import csv
import json

import pytest
from campaign_archive import fitted_campaign

from dunhamfit.archive.store import open_archive
from dunhamfit.cli.main import main
from dunhamfit.results.predict import predict

FIELDS = {
    "isotopologue", "v_upper", "j_upper", "v_lower", "j_lower", "position", "sigma", "sigma_fit", "sigma_calibration",
    "sigma_model", "sigma_masses", "inside", "where", "unit",
}  # fmt: skip


@pytest.fixture(scope="module")
def archive(tmp_path_factory):
    return fitted_campaign(tmp_path_factory.mktemp("campaign"), "per-source", "common")


def test_json_is_what_the_interface_gives(archive, capsys):
    capsys.readouterr()
    arguments = ["predict", str(archive), "--band", "2-0", "--band", "1-0", "--jmax", "12", "--isotopologue", "29Si34S"]
    assert main([*arguments, "--json", "--run", "1"]) == 0
    document = json.loads(capsys.readouterr().out)
    with open_archive(archive) as store:
        fit = store.load(1)
    expected = []
    for v_upper in (2, 1):
        expected += predict(fit, v_upper=v_upper, v_lower=0, j_max=12, isotopologue="29Si34S").records()
    assert document["run"] == 1
    assert document["lines"] == expected
    assert set(document["lines"][0]) == FIELDS
    # The furnace spectrum has a shared scale error with a prior.
    assert all(item["sigma_calibration"] > 0 for item in document["lines"])


def test_csv_holds_every_digit(archive, tmp_path):
    target = tmp_path / "lines.csv"
    assert main(["predict", str(archive), "--band", "0-0", "--unit", "MHz", "-o", str(target), "--quiet"]) == 0
    with open(target, newline="") as file:
        rows = list(csv.DictReader(file))
    with open_archive(archive) as store:
        records = predict(store.latest(), v_upper=0, v_lower=0, j_max=30).records("MHz")
    assert [float(row["position"]) for row in rows] == [item["position"] for item in records]
    assert [float(row["sigma"]) for row in rows] == [item["sigma"] for item in records]
    assert rows[0]["sigma_model"] == ""
    assert rows[0]["unit"] == "MHz"


def test_table_names_lines_and_says_what_sigma_is(archive, capsys):
    capsys.readouterr()
    arguments = ["predict", str(archive), "--band", "9-0", "--jmax", "3", "--tolerance", "1e-3"]
    assert main(arguments) == 0
    text = " ".join(capsys.readouterr().out.split())
    for part in ("R(3)", "outside", "--model-spread adds it", "1 standard uncertainty", "Validity for 28Si32S"):
        assert part in text


def test_model_spread_is_added(archive, capsys):
    capsys.readouterr()
    assert main(["predict", str(archive), "--band", "8-0", "--jmax", "2", "--model-spread", "--json", "--quiet"]) == 0
    for line in json.loads(capsys.readouterr().out)["lines"]:
        squares = sum(line[f"sigma_{part}"] ** 2 for part in ("fit", "calibration", "model", "masses"))
        assert line["sigma"] == pytest.approx(squares**0.5, rel=1e-12)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["--band", "2"], "a band is written as v'-v''"),
        (["--band", "0-2"], "a band needs v' >= v'' >= 0"),
        (["--band", "1-0", "--isotopologue", "12C16O"], "not an isotopologue of the same molecule"),
        (["--band", "1-0", "--run", "7"], "7"),
        (["--band", "1-0", "--tolerance", "0"], "tolerance must be positive"),
    ],
)
def test_wrong_use_is_told(archive, capsys, arguments, message):
    capsys.readouterr()
    assert main(["predict", str(archive), *arguments]) == 2
    assert message in capsys.readouterr().err
