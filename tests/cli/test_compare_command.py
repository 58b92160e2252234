"""`compare` on the invented campaign: runs of one archive, and files."""

from __future__ import annotations

import json

import pytest
from campaign_archive import fitted_campaign

from dunhamfit.cli.main import main


@pytest.fixture(scope="module")
def archive(tmp_path_factory):
    return fitted_campaign(tmp_path_factory.mktemp("campaign"), "per-source", "common", "per-source")


def compared(arguments, capsys) -> dict:
    capsys.readouterr()
    assert main(["compare", *map(str, arguments), "--json"]) == 0
    return json.loads(capsys.readouterr().out)


def test_a_run_repeated_is_the_same(archive, capsys):
    document = compared([archive, 1, 3], capsys)
    assert document["relation"] == "same fit"
    assert all(item["shift"] == 0.0 for item in document["constants"])
    assert (document["lines"]["largest"], document["lines"]["rms"], document["signs"]) == (0.0, 0.0, [])
    # Used rows of the three files, counted outside: examples/README.md.
    assert document["lines"]["lines"] == 157 + 1002 + 213 - 2


def test_the_last_two_by_default(archive, capsys):
    document = compared([archive], capsys)
    assert (document["old"], document["new"]) == ("run 2", "run 3")
    # Another error policy: how far the constants may move is not known.
    assert document["relation"] == "shared lines"
    assert {item["sigma_shift"] for item in document["constants"]} == {None}
    assert set(document["constants"][0]) >= {"name", "old", "new", "shift", "sigma_shift"}


def test_what_fit_prints_can_be_compared(archive, tmp_path, capsys):
    capsys.readouterr()
    job = archive.parent / "sis.toml"
    assert main(["fit", str(job), "-o", str(tmp_path / "other.h5"), "--json", "--quiet"]) == 0
    printed = tmp_path / "constants.json"
    printed.write_text(capsys.readouterr().out)
    document = compared([archive, 1, "--constants", printed], capsys)
    assert all(item["shift"] == 0.0 for item in document["constants"])
    assert document["lines"]["rms"] == 0.0
    assert document["lines"]["left_out"] == 0


def test_the_truth_of_the_campaign_with_its_signs_turned(archive, tmp_path, capsys):
    terms = json.loads((archive.parent / "truth.json").read_text())["terms"]
    given = tmp_path / "given.json"
    given.write_text(json.dumps({"constants": {**terms, "Y02": -terms["Y02"]}}))
    document = compared([archive, "--constants", given], capsys)
    assert [item["name"] for item in document["signs"]] == ["Y02"]
    assert "D_e = -Y02" in document["signs"][0]["text"]
    # Constants without breakdown terms speak for one isotopologue only.
    assert document["lines"]["left_out"] > 0
    assert abs(document["lines_turned"]["largest"]) < 1e-3 < 1 < abs(document["lines"]["largest"])
    capsys.readouterr()
    assert main(["compare", str(archive), "--constants", str(given)]) == 0
    text = " ".join(capsys.readouterr().out.split())
    assert "Y02 has opposite signs in the two sets" in text
    assert "With these signs turned" in text


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["1"], "give two runs"),
        (["1", "9"], "9"),
        (["1", "2", "--constants", "x.json"], "give one run to compare with x.json"),
        (["--constants", "none.json"], "none.json"),
    ],
)
def test_wrong_use_is_told(archive, capsys, arguments, message):
    capsys.readouterr()
    assert main(["compare", str(archive), *arguments]) == 2
    assert message in capsys.readouterr().err


def test_a_file_that_is_no_json_is_told(archive, tmp_path, capsys):
    (tmp_path / "bad.json").write_text("{")
    capsys.readouterr()
    assert main(["compare", str(archive), "--constants", str(tmp_path / "bad.json")]) == 2
    assert "is not JSON" in capsys.readouterr().err
