"""`diagnose`: residual tests, influence, left-out bands and the bootstrap, as tables and as JSON."""

from __future__ import annotations

import json
import shutil
from importlib.resources import files
from pathlib import Path

import pytest

from dunhamfit.cli.main import main


@pytest.fixture(scope="module")
def archive(tmp_path_factory) -> Path:
    """The invented campaign, fitted."""
    folder = tmp_path_factory.mktemp("diagnosed")
    for source in (Path(str(files("dunhamfit"))) / "examples" / "campaign").iterdir():
        shutil.copy(source, folder)
    assert main(["fit", str(folder / "sis.toml"), "--quiet"]) == 0
    return folder / "sis.h5"


def test_document(archive, capsys):
    capsys.readouterr()
    assert main(["diagnose", str(archive), "--json", "--bootstrap", "50"]) == 0
    document = json.loads(capsys.readouterr().out)
    for item in document["influence"]:
        assert sum(item["shares"].values()) == pytest.approx(1.0, abs=1e-9)
    assert len(document["left_out"]) == 16
    # Only 28Si34S 1-0 tells the vibrational breakdown term of sulphur.
    lost = {item["without"]: item["undetermined"] for item in document["left_out"] if not item["determined"]}
    assert lost == {"28Si34S 1-0": ["d10_S"]}
    assert document["bootstrap"]["sd"]["Y10"] > 0


def test_tables(archive, capsys):
    capsys.readouterr()
    assert main(["diagnose", str(archive)]) == 0
    text = capsys.readouterr().out
    for title in ("Systematic residuals", "Who determines which constant", "Without each source", "Without each band"):
        assert title in text
    assert max(len(line) for line in text.splitlines()) <= 80
