"""`select` and `terms = "auto"` on the invented campaign of the package, whose true set is [4, 3, 2, 1]."""

from __future__ import annotations

import csv
import json
import shutil
from importlib.resources import files
from pathlib import Path

import pytest

from dunhamfit.archive.store import open_archive
from dunhamfit.cli.main import main
from dunhamfit.molecule.terms import TermSet

TRUE = TermSet.from_orders([4, 3, 2, 1])


@pytest.fixture
def job(tmp_path):
    for source in (Path(str(files("dunhamfit"))) / "examples" / "campaign").iterdir():
        shutil.copy(source, tmp_path)
    return tmp_path / "sis.toml"


def test_json_has_every_set_and_one_recommended(job, capsys):
    assert main(["select", str(job), "--json", "--quiet"]) == 0
    document = json.loads(capsys.readouterr().out)
    fields = {"terms", "parameters", "chi2", "reduced_chi2", "aicc", "bic", "left_out_error", "condition"}
    assert all({*fields, "recommended"} <= set(item) for item in document["sets"])
    best = [item for item in document["sets"] if item["recommended"]]
    assert [item["terms"] for item in best] == [list(TRUE.names)]
    assert sum(item["weight"] for item in document["sets"]) == pytest.approx(1.0)
    assert not list(job.parent.glob("*.h5"))


def test_table_says_what_and_why(job, capsys):
    assert main(["select", str(job)]) == 0
    text = " ".join(capsys.readouterr().out.split())
    for part in ("recommended", "near-equal", f"Recommended: {' '.join(TRUE.names)}", "lowest BIC", "are not shown"):
        assert part in text


def test_csv_and_orders(job, tmp_path, capsys):
    target = tmp_path / "sets.csv"
    assert main(["select", str(job), "--orders", "2,1", "-o", str(target), "--quiet"]) == 0
    with open(target, newline="") as file:
        rows = list(csv.DictReader(file))
    assert rows[-1]["terms"] == "Y10 Y20 Y01 Y11"
    assert all(float(row["bic"]) for row in rows)


def test_auto_takes_the_recommended_set_and_says_so(job, capsys):
    job.write_text(job.read_text().replace("terms = [4, 3, 2, 1]", 'terms = "auto"'))
    assert main(["fit", str(job), "--quiet"]) == 0
    said = " ".join(capsys.readouterr().err.split())
    assert 'terms = "auto" took Y10' in said
    assert "Nearly equal" in said
    with open_archive(job.parent / "sis.h5") as store:
        fit = store.latest()
    assert fit.model.terms == TRUE
    assert any(text.startswith('terms = "auto"') for text in fit.warnings)
    assert main(["verify", str(job.parent / "sis.h5"), "--quiet"]) == 0


@pytest.mark.parametrize("orders", ["", "4,x", "4;3", "-1", "400"])
def test_wrong_orders_are_told(job, capsys, orders):
    assert main(["select", str(job), f"--orders={orders}"]) == 2
    assert "--orders takes the highest k" in capsys.readouterr().err
