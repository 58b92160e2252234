"""`history` and `verify` on the invented campaign: what is listed is what was stored."""

from __future__ import annotations

import csv
import json
import shutil
from datetime import datetime
from importlib.resources import files
from pathlib import Path

import pytest

from dunhamfit.cli.main import main


@pytest.fixture(scope="module")
def archive(tmp_path_factory) -> Path:
    """The campaign fitted twice, the second time with another error policy."""
    folder = tmp_path_factory.mktemp("campaign")
    for source in (Path(str(files("dunhamfit"))) / "examples" / "campaign").iterdir():
        shutil.copy(source, folder)
    job = folder / "sis.toml"
    assert main(["fit", str(job), "--quiet"]) == 0
    job.write_text(job.read_text().replace("per-source", "common"))
    assert main(["fit", str(job), "--quiet"]) == 0
    return folder / "sis.h5"


def test_json_lists_every_run(archive, capsys):
    capsys.readouterr()
    assert main(["history", str(archive), "--json"]) == 0
    first, second = json.loads(capsys.readouterr().out)["runs"]
    assert (first["run"], first["parent"], second["run"], second["parent"]) == (1, None, 2, 1)
    assert first["added"] == first["sources"] == ["millimetre", "furnace", "laser"]
    assert second["added"] == []
    # Data rows of the three files, counted outside: examples/README.md.
    assert first["lines"] == 157 + 1002 + 213
    assert first["used"] == first["lines"] - 2
    assert (first["error_policy"], second["error_policy"]) == ("per-source", "common")
    # ISO 8601 with its zone.
    assert datetime.fromisoformat(first["time"]).utcoffset().total_seconds() == 0


def test_table_says_what_a_run_changed(archive, capsys):
    capsys.readouterr()
    assert main(["history", str(archive)]) == 0
    text = capsys.readouterr().out
    assert "Runs of sis.h5" in text
    assert "policy common" in " ".join(text.split())


def test_csv_has_one_row_a_run(archive, tmp_path, capsys):
    assert main(["history", str(archive), "-o", str(tmp_path / "runs.csv")]) == 0
    with open(tmp_path / "runs.csv", newline="") as file:
        rows = list(csv.DictReader(file))
    assert [row["run"] for row in rows] == ["1", "2"]
    assert rows[0]["parent"] == ""


def test_missing_archive_is_told(tmp_path, capsys):
    assert main(["history", str(tmp_path / "none.h5")]) == 6
    assert "there is no such archive" in capsys.readouterr().err
