"""`export`: what it writes reads back to the same fit, and nothing that differs is written over."""

from __future__ import annotations

import csv
import json
import re
import shutil
from importlib.resources import files
from pathlib import Path

import numpy as np
import pytest
from astropy.io import ascii as ascii_tables

from dunhamfit.archive.store import open_archive
from dunhamfit.cli.main import main


@pytest.fixture(scope="module")
def exported(tmp_path_factory) -> Path:
    """The invented campaign, fitted and exported."""
    folder = tmp_path_factory.mktemp("campaign")
    for source in (Path(str(files("dunhamfit"))) / "examples" / "campaign").iterdir():
        shutil.copy(source, folder)
    assert main(["fit", str(folder / "sis.toml"), "--quiet"]) == 0
    assert main(["export", str(folder / "sis.h5"), "--to", str(folder / "out"), "--no-figures", "--quiet"]) == 0
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
        assert main(["export", str(archive), "--to", str(exported), "--no-figures"]) == 2
        assert "tables.txt is there and differs" in capsys.readouterr().err
        assert target.read_text(encoding="utf-8") == "mine"
    finally:
        target.write_text(before, encoding="utf-8")


def test_line_table_reads_back(exported):
    """astropy reads the byte-by-byte description that goes with the lines."""
    with open(exported / "lines.mrt", encoding="utf-8") as file:
        table = ascii_tables.read(file.read(), format="mrt")
    with open(exported / "lines-2-furnace.csv", newline="") as file:
        rows = list(csv.DictReader(file))
    furnace = table[table["Source"] == "furnace"]
    assert len(furnace) == len(rows)
    assert list(furnace["Flag"]).count("x") == 2
    for row, line in zip(rows, furnace, strict=True):
        # The columns carry two digits beyond the smallest sigma, 7e-7 cm-1.
        assert float(row["position"]) == pytest.approx(float(line["Obs"]), abs=6e-10)
        assert float(row["obs_minus_calc"]) == pytest.approx(float(line["O-C"]), abs=6e-10)


def test_printed_constants_give_every_line_back(exported):
    """The constants of the LaTeX table move no line by a tenth of its sigma (Le Roy 1998; from memory)."""
    printed = {}
    for row in (exported / "constants.tex").read_text().splitlines():
        found = re.match(
            r"\$(Y|d)_\{(\d+)\}(?:\^\{\\mathrm\{(\w+)\}\})?\$ & \$(-?[\d.]+)\(\d+\)(?:\\times 10\^\{(-?\d+)\})?\$", row
        )
        if found:
            kind, digits, atom, value, power = found.groups()
            name = f"Y{digits}" if kind == "Y" else f"d{digits}_{atom}"
            printed[name] = float(f"{value}e{power or 0}")
    with open_archive(exported.parent / "sis.h5") as store:
        fit = store.latest()
    assert set(printed) == {item.name for item in fit.constants}
    move = np.zeros(len(fit.values))
    for index, item in enumerate(fit.constants):
        move[index] = printed[item.name] - fit.values[index]
    shift = fit.design.rows.whitened @ move
    assert np.max(np.abs(shift)) < 0.1 * 1.6  # stated sigma; the furnace's noise factor is 1.58


def test_methods_and_references(exported):
    methods = (exported / "methods.txt").read_text()
    document = json.loads((exported / "constants.json").read_text())
    assert f"{document['counts']['used']} lines of {document['counts']['bands']} bands" in methods
    assert f"{document['counts']['excluded']} lines that were read took no part" in methods
    entries = re.findall(r"@\w+\{(\w+),", (exported / "references.bib").read_text())
    cited = set(re.findall(r"\[(\w+)\]", methods))
    assert cited <= set(entries)


def test_figures_are_made_without_a_display(exported, tmp_path, monkeypatch):
    monkeypatch.delenv("DISPLAY", raising=False)
    archive = exported.parent / "sis.h5"
    assert main(["export", str(archive), "--to", str(tmp_path / "out"), "--quiet"]) == 0
    for name in ("residuals", "quantiles", "correlation", "prediction_sigma", "potential"):
        assert (tmp_path / "out" / "figures" / f"{name}.pdf").read_bytes().startswith(b"%PDF")
        assert (tmp_path / "out" / "figures" / f"{name}.png").read_bytes().startswith(b"\x89PNG")
