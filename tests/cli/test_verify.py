"""`verify`: agreement, and a file whose numbers were changed behind its back."""

from __future__ import annotations

import json
import shutil
from importlib.resources import files
from pathlib import Path

import h5py
import numpy as np
import pytest

from dunhamfit.cli.main import main


@pytest.fixture
def archive(tmp_path) -> Path:
    for source in (Path(str(files("dunhamfit"))) / "examples" / "campaign").iterdir():
        shutil.copy(source, tmp_path)
    assert main(["fit", str(tmp_path / "sis.toml"), "--quiet"]) == 0
    return tmp_path / "sis.h5"


def test_an_untouched_archive_agrees(archive, capsys):
    capsys.readouterr()
    assert main(["verify", str(archive), "--json"]) == 0
    document = json.loads(capsys.readouterr().out)
    assert document["agrees"] is True
    (run,) = document["runs"]
    # 1e-10 is what the issue asks of a repeat.
    assert run["agrees"] is True and run["difference"] <= 1e-10 and run["problems"] == []


def test_a_changed_position_is_found(archive, capsys):
    with h5py.File(archive, "r+") as file:
        stored = next(iter(file["lines"].values()))
        positions = stored["position"][()]
        positions[3] = np.nextafter(positions[3], 1e9)
        stored["position"][...] = positions
    capsys.readouterr()
    assert main(["verify", str(archive)]) == 6
    said = capsys.readouterr()
    assert "DOES NOT AGREE" in said.out
    assert "has changed since it was stored" in " ".join(said.out.split())
    assert "run 1 does not agree" in said.err
