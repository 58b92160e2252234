"""`selftest` on the invented campaign."""

from __future__ import annotations

import json
import shutil
from importlib.resources import files
from pathlib import Path

import pytest

from dunhamfit.cli.main import main


@pytest.fixture(scope="module")
def archive(tmp_path_factory) -> Path:
    folder = tmp_path_factory.mktemp("campaign")
    for source in (Path(str(files("dunhamfit"))) / "examples" / "campaign").iterdir():
        shutil.copy(source, folder)
    assert main(["fit", str(folder / "sis.toml"), "--quiet"]) == 0
    return folder / "sis.h5"


def document(capsys, *arguments) -> dict:
    capsys.readouterr()
    assert main(["selftest", *map(str, arguments), "--json"]) == 0
    return json.loads(capsys.readouterr().out)


def test_json(archive, capsys):
    found = document(capsys, archive, "--sets", 40, "--seed", 7)
    assert (found["sets"], found["failed"], found["seed"]) == (40, 0, 7)
    assert [item["name"] for item in found["constants"]][:2] == ["Y10", "Y20"]
    for item in found["constants"]:
        narrow, wide = item["coverage"]
        # Four binomial standard deviations of 40 sets.
        assert narrow == pytest.approx(0.683, abs=0.30) and wide == pytest.approx(0.95, abs=0.14)
    assert [item["name"] for item in found["noise_factors"]] == ["millimetre", "furnace", "laser"]


def test_the_seed_repeats_it_and_a_new_one_is_said(archive, capsys):
    first, again = (document(capsys, archive, "--sets", 3, "--seed", 7) for _ in range(2))
    assert first == again
    drawn = document(capsys, archive, "--sets", 3)
    assert drawn == document(capsys, archive, "--sets", 3, "--seed", drawn["seed"])


def test_table(archive, capsys):
    capsys.readouterr()
    assert main(["selftest", str(archive), "--sets", "5", "--seed", "1", "--run", "1"]) == 0
    out, err = capsys.readouterr()
    assert "Coverage of the error bars" in out and "Noise factors found" in out
    assert err == ""  # no terminal, no bar


@pytest.mark.slow
def test_workers_change_nothing_but_the_time(archive, capsys):
    alone = document(capsys, archive, "--sets", 6, "--seed", 7)
    shared = document(capsys, archive, "--sets", 6, "--seed", 7, "--workers", 2)
    for one, two in zip(alone["constants"], shared["constants"], strict=True):
        assert one["coverage"] == two["coverage"]
        assert one["rms_z"] == pytest.approx(two["rms_z"], rel=1e-6)


def test_a_run_that_is_not_there(archive, capsys):
    capsys.readouterr()
    assert main(["selftest", str(archive), "--run", "9"]) == 2
    assert "there is no run 9" in capsys.readouterr().err
