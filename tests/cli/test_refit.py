"""`refit` on the invented campaign: the next band, changed choices, edited jobs, and kill -9."""

from __future__ import annotations

import json
import shutil
import subprocess
import sys
import time
from importlib.resources import files
from pathlib import Path

import numpy as np
import pytest

from dunhamfit.archive.store import open_archive
from dunhamfit.cli.main import main

ROOT = Path(__file__).resolve().parents[2]
EXAMPLES = Path(str(files("dunhamfit"))) / "examples"
BAND = EXAMPLES / "next_band" / "furnace_5-4.csv"
COLUMNS = "isotopologue=iso,v_upper=v1,v_lower=v0,branch=br,j_lower=J,position=nu,uncertainty=unc"
NEW = ("--add", str(BAND), "--as", "later", "--columns", COLUMNS, "--coverage-factor", "1")
TERMS = ("Y10", "Y20", "Y30", "Y40", "Y01", "Y11", "Y21", "Y31", "Y02", "Y12", "Y22", "Y03", "Y13")


@pytest.fixture(scope="module")
def folder(tmp_path_factory) -> Path:
    """The campaign, fitted once, without the files that it was fitted from."""
    folder = tmp_path_factory.mktemp("campaign")
    for source in (EXAMPLES / "campaign").iterdir():
        shutil.copy(source, folder)
    assert main(["fit", str(folder / "sis.toml"), "--quiet"]) == 0
    for name in ("millimetre.csv", "furnace.csv", "laser.txt"):
        (folder / name).unlink()
    return folder


@pytest.fixture
def archive(folder, tmp_path) -> Path:
    """A copy for each test."""
    return Path(shutil.copy(folder / "sis.h5", tmp_path / "sis.h5"))


def refit(archive: Path, capsys, *options: str) -> dict:
    capsys.readouterr()
    assert main(["refit", str(archive), *options, "--json", "--quiet"]) == 0
    return json.loads(capsys.readouterr().out)


def changed_band(tmp_path: Path, change) -> str:
    """The next band with positions that `change` makes of the positions, shape (n,)."""
    head, *rows = BAND.read_text(encoding="utf-8").splitlines()[2:]
    cells = [row.split(",") for row in rows]
    positions = change(np.array([float(row[5]) for row in cells]))
    for row, position in zip(cells, positions.tolist(), strict=True):
        row[5] = f"{position:.9f}"
    path = tmp_path / "changed.csv"
    path.write_text("\n".join([head, *(",".join(row) for row in cells)]) + "\n", encoding="utf-8")
    return str(path)


def test_next_band_is_tested_merged_and_near_the_truth(archive, capsys):
    document = refit(archive, capsys, *NEW)
    assert (document["run"], document["parent"]) == (2, 1)
    assert document["counts"]["lines"] == 157 + 1002 + 213 + 135  # examples/README.md
    (test,) = document["before_merge"]
    assert (test["source"], test["lines"], test["agrees"], test["dof"]) == ("later", 135, True, 135)
    assert test["verdict"] == "Source later agrees with the constants before the merge."
    # examples/campaign/truth.json, written by a script that knows nothing of this program.
    truth = json.loads((EXAMPLES / "campaign" / "truth.json").read_text(encoding="utf-8"))
    text = json.dumps(truth)
    for item in document["constants"]:
        if item["name"] in TERMS:
            expected = _found(truth, item["name"])
            assert expected is not None, text
            # 13 terms: the largest of so many normal deviates exceeds 3.5 once in 160 campaigns.
            assert abs(item["value"] - expected) < 3.5 * item["sigma"], item["name"]
    shrunk = {item["name"]: item["sigma_new"] / item["sigma_old"] for item in document["shifts"]}
    # v = 5 is a new level: the constants of highest k gain most.
    assert shrunk["Y40"] < 0.6 and shrunk["Y31"] < 0.6 and shrunk["Y03"] > 0.9
    assert all(abs(item["in_sigma"]) < 4 for item in document["shifts"] if item["in_sigma"] is not None)
    reach = {item["name"]: item for item in document["terms_within_reach"]}
    assert reach["Y50"]["sigma"] < 1e-3 * reach["Y50"]["sigma_old"]


def _found(tree, name: str):
    """The number that stands under `name` anywhere in a JSON document."""
    if isinstance(tree, dict):
        if isinstance(tree.get(name), (int, float)):
            return tree[name]
        tree = list(tree.values())
    if isinstance(tree, list):
        return next((value for item in tree if (value := _found(item, name)) is not None), None)
    return None


def test_tables_say_the_same(archive, capsys):
    capsys.readouterr()
    assert main(["refit", str(archive), *NEW]) == 0
    said = capsys.readouterr()
    text = " ".join(said.out.split())
    for words in (
        "New lines against the old constants",
        "Source later agrees with the constants before the merge.",
        "What the new lines moved",
        "Terms within reach",
        "Constants of 28Si32S",
    ):
        assert words in text
    assert f"run 2 stored in {archive}, after run 1" in said.err


def test_archive_alone_repeats_the_run(archive, capsys):
    first = refit(archive, capsys)
    second = refit(archive, capsys)
    assert first["constants"] == second["constants"]
    assert second["before_merge"] == []
    with open_archive(archive) as store:
        assert store.identity(1) == store.identity(2) == store.identity(3)
    assert main(["verify", str(archive), "--quiet"]) == 0


def test_changed_choices(archive, capsys):
    document = refit(archive, capsys, "--policy", "common", "--terms", "5,3,2,1")
    assert document["error_policy"] == "common"
    assert "Y50" in [item["name"] for item in document["constants"]]
    assert all(item["sigma_shift"] is None for item in document["shifts"])
    named = refit(archive, capsys, "--run", "1", "--terms", ",".join(TERMS))
    assert (named["parent"], named["counts"]["used"]) == (1, 1370)
    assert main(["verify", str(archive), "--quiet"]) == 0


def test_edited_job_reads_no_old_file(archive, folder, tmp_path, capsys):
    """Another exclusion, another shared error, one source less, and a new one."""
    text = (folder / "sis.toml").read_text(encoding="utf-8")
    text = text.replace("scale = 5e-08", 'scale = 1e-7\nuse = "v_upper <= 3"')
    text = text[: text.index('[[source]]\nname = "laser"')] + text[text.index("[[exclude]]") :]
    columns = ", ".join(f'{k} = "{v}"' for k, v in (pair.split("=") for pair in COLUMNS.split(",")))
    text += f'\n[[source]]\nname = "later"\nfile = "{BAND}"\nformat = "delimited"\ncolumns = {{ {columns} }}\n'
    text = text.replace("rows = [72]", "rows = [73]")
    job = tmp_path / "edited.toml"
    job.write_text(text, encoding="utf-8")
    document = refit(archive, capsys, "--job", str(job))
    assert [item["name"] for item in document["sources"]] == ["millimetre", "furnace", "later"]
    assert document["calibration"][0]["prior_sigma"] == 1e-7
    by_reason = {(item["source"], item["row"]): item["reason"] for item in document["excluded"]}
    assert ("furnace", 73) in by_reason and ("furnace", 72) not in by_reason
    assert "use: v_upper <= 3" in by_reason.values()
    bands = {(item["v_upper"], item["v_lower"]): item["used"] for item in document["bands"]}
    assert bands[4, 3] == 0 and bands[5, 4] == 135
    assert main(["verify", str(archive), "--quiet"]) == 0


def test_edited_job_cannot_change_what_was_read(archive, folder, tmp_path, capsys):
    job = tmp_path / "edited.toml"
    text = (folder / "sis.toml").read_text(encoding="utf-8").replace("coverage_factor = 2", "coverage_factor = 3")
    job.write_text(text, encoding="utf-8")
    assert main(["refit", str(archive), "--job", str(job)]) == 2
    assert "'millimetre' is stored with coverage factor 2.0" in capsys.readouterr().err


@pytest.mark.parametrize(
    "change, words",
    [
        (lambda nu: nu + 1e-3, "one offset of"),
        (lambda nu: np.where(np.arange(len(nu)) == 30, nu + 0.01, nu), "without 1 single line it does"),
    ],
)
def test_a_band_that_does_not_agree_is_held_if_asked(archive, tmp_path, capsys, change, words):
    path = changed_band(tmp_path, change)
    options = ["refit", str(archive), "--add", path, "--columns", COLUMNS, "--coverage-factor", "1", "--quiet"]
    capsys.readouterr()
    assert main([*options, "--hold-if-inconsistent", "--json"]) == 3
    said = capsys.readouterr()
    (test,) = json.loads(said.out)["before_merge"]
    assert not test["agrees"] and words in test["verdict"]
    assert "nothing was merged" in said.err
    with open_archive(archive) as store:
        assert store.numbers() == (1,)
    # The user decides: without the option the merge goes on.
    assert main([*options, "--json"]) == 0
    assert words in json.loads(capsys.readouterr().out)["before_merge"][0]["verdict"]


@pytest.mark.parametrize(
    "options, words",
    [
        (("--columns", "position"), "--columns must look like key=value"),
        (("--offset", "small"), "--offset must be a number or free"),
        (("--as", "furnace"), "there is a source 'furnace' already"),
        (("--run", "9"), "there is no run 9"),
        (("--job", "edited.toml"), "leave out --add"),
    ],
)
def test_wrong_use_is_told(archive, capsys, options, words):
    assert main(["refit", str(archive), *NEW, *options]) == 2
    assert words in capsys.readouterr().err


def test_the_same_band_is_not_added_twice(archive, capsys):
    refit(archive, capsys, *NEW)
    again = ["--add", str(BAND), "--as", "again", "--columns", COLUMNS]
    assert main(["refit", str(archive), *again]) == 2
    assert "was read as source 'later' already" in capsys.readouterr().err


def kills(archive: Path, count: int, rng: np.random.Generator) -> int:
    """Kill `refit` at random moments; after each the archive must open and hold every earlier run.

    Returns
    -------
    int
        How many refits had stored their run before they were killed.
    """
    command = [sys.executable, "-m", "dunhamfit.cli.main", "refit", str(archive), "--run", "1", "--quiet", *NEW]
    start = time.perf_counter()
    subprocess.run(command, cwd=ROOT, check=True, stdout=subprocess.DEVNULL)
    usual = time.perf_counter() - start
    stored = 0
    for _ in range(count):
        before = _contents(archive)
        process = subprocess.Popen(command, cwd=ROOT, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
        time.sleep(rng.uniform(0, 1.1 * usual))
        process.kill()
        process.wait()
        after = _contents(archive)
        assert after[: len(before)] == before
        stored += len(after) - len(before)
    assert main(["verify", str(archive), "--quiet"]) == 0
    subprocess.run(command, cwd=ROOT, check=True, stdout=subprocess.DEVNULL)
    assert not list(archive.parent.glob(f".{archive.name}*.new"))
    return stored


def _contents(archive: Path) -> list[tuple]:
    with open_archive(archive) as store:
        return [(run, store.identity(run), store.load(run).values.tobytes()) for run in store.numbers()]


@pytest.mark.slow
def test_kill_nine_loses_nothing(archive, rng):
    kills(archive, 10, rng)
