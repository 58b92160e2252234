"""`fit` and `check` from the command line: the document, the exit codes, and nothing stored where nothing is known."""

from __future__ import annotations

import json
import shutil
from pathlib import Path

import pytest

from dunhamfit.cli.main import main

JOB = """
[molecule]
reference = "12C16O"
[[source]]
name = "published"
file = "list.par"
format = "hitran"
isotopologue = "12C16O"
{use}
[model]
terms = {terms}
"""


@pytest.fixture
def published(shared_reference, tmp_path):
    """Write a job on the published list of carbon monoxide (HITRAN2016, JQSRT 203, 3 (2017)) and return its path."""

    def write(terms: str, use: str = "") -> Path:
        shutil.copy(shared_reference / "co_hitran2016_6iso.par", tmp_path / "list.par")
        path = tmp_path / "job.toml"
        path.write_text(JOB.format(terms=terms, use=f'use = "{use}"' if use else ""), encoding="utf-8")
        return path

    return write


def test_document_of_a_real_fit(published, capsys):
    assert main(["fit", str(published("[5, 4, 3, 2, 1]", "v_upper <= 5")), "--json", "--quiet"]) == 0
    document = json.loads(capsys.readouterr().out)
    assert document["format"] == "dunhamfit-fit/1"
    counts = document["counts"]
    assert (counts["lines"], counts["used"], counts["excluded"]) == (5381, 1235, 5381 - 1235)
    values = {item["name"]: item["value"] for item in document["constants"]}
    # George et al., J. Mol. Spectrosc. 165, 500 (1994); the distances that the decade codes allow.
    assert values["Y01"] == pytest.approx(1.93128090, abs=2e-7)
    assert values["Y10"] == pytest.approx(2169.81272, abs=1e-3)
    assert len(document["covariance"]) == len(document["constants"]) == 19
    assert any("upper end is taken as sigma" in text for text in document["warnings"])


def test_terms_beyond_the_levels_are_refused_and_nothing_is_stored(published, capsys):
    job = published("[9, 5, 4, 3, 1]")
    assert main(["fit", str(job), "--json"]) == 4
    captured = capsys.readouterr()
    assert captured.out == ""
    assert "Y80 and Y90: 9 terms with l = 0 need as many independent differences" in captured.err
    assert "Traceback" not in captured.err
    assert not job.with_suffix(".h5").exists()


def test_twelve_faults_are_twelve_messages(tmp_path, capsys):
    rows = """position,uncertainty,v_upper,v_lower,branch,j_lower,isotopologue
744.1,0.001,1,0,R,1,28Si32S
744.2,0.001,1,0,P,0,28Si32S
744.3,0.001,1,0,R,-3,28Si32S
744.4,0.001,1,0,R,2.5,28Si32S
744.5,0.001,1,0,Q,7,28Si32S
744.6,0.001,0,1,R,8,28Si32S
744.7,0,1,0,R,9,28Si32S
744.8,-0.001,1,0,R,10,28Si32S
744.9,,1,0,R,11,28Si32S
nan,0.001,1,0,R,12,28Si32S
745.1,0.001,1,0,R,13,32S28Si
745.2,0.001,1,0,R
745.3,0.001,1,0,R,412,28Si32S
"""
    (tmp_path / "faulty.csv").write_text(rows, encoding="utf-8")
    job = tmp_path / "job.toml"
    job.write_text(
        '[molecule]\nreference = "28Si32S"\n[[source]]\nname = "faulty"\nfile = "faulty.csv"\n'
        "[model]\nterms = [1, 0]\n",
        encoding="utf-8",
    )
    for command in ("check", "fit"):
        assert main([command, str(job)]) == 3
        error = capsys.readouterr().err
        assert "1 row is fine; 12 faults, nothing was fitted:" in error
        for line in range(3, 15):
            assert error.count(f"faulty.csv:{line}: ") == 1
        assert "Traceback" not in error


def test_a_text_file_named_as_an_archive_is_left_alone(published, capsys):
    job = published("[5, 4, 3, 2, 1]", "v_upper <= 5")
    archive = job.with_suffix(".h5")
    archive.write_text("not an archive", encoding="utf-8")
    assert main(["fit", str(job), "--quiet"]) == 6
    assert archive.read_text(encoding="utf-8") == "not an archive"
    error = [line for line in capsys.readouterr().err.splitlines() if line.startswith("dunhamfit: ")]
    assert len(error) == 1
