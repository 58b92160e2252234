"""The example campaign against itself: the script, the packaged files and the stated truth must agree.

No part of dunhamfit is used here. Files are read and fitted with the standard library and numpy,
and the model is written out a second time, so that the files can serve as an outside check of the
program. Masses: AME2020, M. Wang et al., Chin. Phys. C 45, 030003 (2021).
"""

from __future__ import annotations

import csv
import json
import re
import subprocess
import sys
import tomllib
from pathlib import Path

import numpy as np
import pytest

ROOT = Path(__file__).resolve().parents[2]
SCRIPT = ROOT / "examples" / "make_campaign.py"
PACKAGED = ROOT / "dunhamfit" / "examples"
CAMPAIGN = PACKAGED / "campaign"
PACKAGED_FILES = sorted(path for path in PACKAGED.rglob("*") if path.is_file())
LATER = PACKAGED / "next_band" / "furnace_5-4.csv"

MHZ_PER_WAVENUMBER = 29979.2458  # exact, definition of the metre (SI brochure, 9th edition, 2019)
TRUTH = json.loads((CAMPAIGN / "truth.json").read_text(encoding="utf-8"))
JOB = tomllib.loads((CAMPAIGN / "sis.toml").read_text(encoding="utf-8"))
FILES = {"millimetre": CAMPAIGN / "millimetre.csv", "furnace": CAMPAIGN / "furnace.csv",
         "laser": CAMPAIGN / "laser.txt", "later-furnace": LATER}  # fmt: skip


def read(source: str) -> list[tuple]:
    """(row, isotopologue, v', J', v'', J'', position, sigma) of one file, cm-1."""
    text = FILES[source].read_text(encoding="utf-8").splitlines()
    start = next(number for number, line in enumerate(text) if not line.startswith("#"))
    lines = []
    for row, line in enumerate(text[start + 1 :], start + 2):
        if source == "laser":
            v_upper, v_lower, branch, j, value, last = re.fullmatch(
                r" *(\d+) +(\d+) ([PR])\((\d+)\) +(\d+\.\d{7})\((\d+)\)", line
            ).groups()
            to_wavenumber, iso, uncertainty = 1e6 / MHZ_PER_WAVENUMBER, "28Si32S", int(last) * 1e-7
        elif source == "millimetre":
            iso, v_upper, j_upper, j, value = next(csv.reader([line]))
            assert int(j_upper) == int(j) + 1
            v_lower, branch, to_wavenumber, uncertainty = v_upper, "R", 1 / MHZ_PER_WAVENUMBER, 0.04 / 2
        else:
            iso, v_upper, v_lower, branch, j, value, uncertainty = next(csv.reader([line]))
            to_wavenumber = 1.0
        j_upper = int(j) + (1 if branch == "R" else -1)
        numbers = (int(v_upper), j_upper, int(v_lower), int(j))
        lines.append((row, iso, *numbers, float(value) * to_wavenumber, float(uncertainty) * to_wavenumber))
    return lines


def mass_ratios(isotopologue: str) -> tuple[float, float, float]:
    """mu_0/mu_a, and M(0)/M(a) - 1 of silicon and of sulphur."""
    silicon, sulphur = (TRUTH["masses"][name] for name in re.findall(r"\d+[A-Z][a-z]?", isotopologue))
    silicon_0, sulphur_0 = TRUTH["masses"]["28Si"], TRUTH["masses"]["32S"]
    inverse = 1 / silicon + 1 / sulphur
    return inverse / (1 / silicon_0 + 1 / sulphur_0), silicon_0 / silicon - 1, sulphur_0 / sulphur - 1


def parameters() -> tuple[list[tuple], np.ndarray]:
    """Labels (kind, k, l) and true values: terms, then breakdown terms."""
    labels = [("term", int(name[1]), int(name[2])) for name in TRUTH["terms"]]
    values = list(TRUTH["terms"].values())
    for element, terms in TRUTH["breakdown"].items():
        labels += [(element, int(name[0]), int(name[1])) for name in terms]
        values += list(terms.values())
    return labels, np.array(values)


def design(lines) -> np.ndarray:
    """Derivative of each line with respect to each parameter, shape (n_lines, n_parameters)."""
    labels, _ = parameters()
    rows = np.empty((len(lines), len(labels)))
    for row, (_, isotopologue, v1, j1, v0, j0, _, _) in zip(rows, lines, strict=True):
        ratio, silicon, sulphur = mass_ratios(isotopologue)
        for column, (kind, k, power) in enumerate(labels):
            upper = (v1 + 0.5) ** k * (j1 * j1 + j1) ** power
            lower = (v0 + 0.5) ** k * (j0 * j0 + j0) ** power
            departure = {"term": 1.0, "Si": silicon, "S": sulphur}[kind]
            row[column] = np.sqrt(ratio) ** (k + 2 * power) * (upper - lower) * departure
    return rows


def wrong_rows(source: str) -> set[int]:
    return {line["row"] for line in TRUTH["wrong_lines"] if line["source"] == source}


def standardised(source: str, lines) -> np.ndarray:
    """(listed - true) / (noise factor * sigma), the known calibration error taken out."""
    _, values = parameters()
    scale = TRUTH["calibration"].get(source, {}).get("scale", 0.0)
    listed = np.array([line[6] for line in lines])
    sigma = np.array([line[7] for line in lines]) * TRUTH["noise_factors"][source]
    return (listed - design(lines) @ values * (1 + scale)) / sigma


def clean(source: str) -> list[tuple]:
    return [line for line in read(source) if line[0] not in wrong_rows(source)]


def test_script_writes_the_packaged_files_every_time(tmp_path):
    for folder in (tmp_path / "first", tmp_path / "second"):
        subprocess.run([sys.executable, str(SCRIPT), str(folder)], check=True)
        written = {path.relative_to(folder) for path in folder.rglob("*") if path.is_file()}
        packaged = {path.relative_to(PACKAGED) for path in PACKAGED.rglob("*") if path.is_file()}
        assert written == packaged
        for name in written:
            assert (folder / name).read_bytes() == (PACKAGED / name).read_bytes(), name


def test_script_does_not_import_the_package():
    assert not re.search(r"^\s*(import|from) dunhamfit", SCRIPT.read_text(encoding="utf-8"), re.MULTILINE)


@pytest.mark.parametrize("path", PACKAGED_FILES, ids=lambda path: path.name)
def test_every_file_says_that_it_is_invented(path):
    assert "nvented" in "\n".join(path.read_text(encoding="utf-8").splitlines()[:2])


def test_masses_are_those_of_ame2020(shared_reference):
    with (shared_reference / "masses_ame2020.csv").open(encoding="utf-8") as file:
        published = {row["nuclide"]: float(row["mass_u"]) for row in csv.DictReader(file)}
    assert {name: published[name] for name in TRUTH["masses"]} == TRUTH["masses"]


def test_campaign_has_the_size_and_variety_it_claims():
    lines = [line for source in ("millimetre", "furnace", "laser") for line in read(source)]
    bands = {(line[1], line[2], line[4]) for line in lines}
    assert 900 <= len(lines) <= 1500
    assert len({(v_upper, v_lower) for _, v_upper, v_lower in bands if v_upper != v_lower}) >= 6
    assert len({isotopologue for isotopologue, _, _ in bands}) == 4
    assert {source["unit"] for source in JOB["source"]} == {"MHz", "cm-1", "THz"}
    assert ("28Si32S", 5, 4) not in bands
    assert {(line[1], line[2], line[4]) for line in read("later-furnace")} == {("28Si32S", 5, 4)}


@pytest.mark.parametrize("source", FILES)
def test_no_transition_is_listed_twice_in_a_source(source):
    transitions = [line[1:6] for line in read(source)]
    assert len(set(transitions)) == len(transitions)


@pytest.mark.parametrize("source", FILES)
def test_clean_lines_scatter_about_the_truth_as_stated(source):
    z = standardised(source, clean(source))
    # chi2 of n lines has standard deviation sqrt(2 n), their mean 1/sqrt(n); 4 standard deviations each.
    assert abs(z @ z - len(z)) < 4 * np.sqrt(2 * len(z))
    assert abs(z.mean()) < 4 / np.sqrt(len(z))
    assert np.abs(z).max() < 4.5  # expected once in 100 such campaigns


def test_rounding_of_the_files_is_well_below_sigma():
    printed = {"millimetre": 1e-3 / MHZ_PER_WAVENUMBER, "furnace": 1e-6, "laser": 0.1 / MHZ_PER_WAVENUMBER,
               "later-furnace": 1e-6}  # fmt: skip
    for source, step in printed.items():
        # The rounding error of a last digit is step / sqrt(12): below 3 % it adds less than 0.05 % to sigma.
        assert max(step / np.sqrt(12) / line[7] for line in read(source)) < 0.03


def test_wrong_lines_are_wrong_as_stated():
    by_row = {(source, line[0]): line for source in FILES for line in read(source)}
    z = {key: standardised(key[0], [line])[0] for key, line in by_row.items()}
    displaced, mislabelled, exchanged = ((line["source"], line["row"]) for line in TRUTH["wrong_lines"])

    listed = by_row[displaced]
    assert abs(z[displaced] - 0.004 / (listed[7] * TRUTH["noise_factors"]["furnace"])) < 4.5

    row, isotopologue, v1, j1, v0, j0, *rest = by_row[mislabelled]
    assert abs(z[mislabelled]) > 1e3
    assert abs(standardised("furnace", [(row, isotopologue, v1, j1 - 1, v0, j0 - 1, *rest)])[0]) < 4.5

    digits = f"{by_row[exchanged][6] * MHZ_PER_WAVENUMBER / 1e6:.7f}"
    put_back = float(digits[:-2] + digits[-1] + digits[-2]) * 1e6 / MHZ_PER_WAVENUMBER
    assert abs(z[exchanged]) > 3  # moved by 5 to 8 sigma, on top of its own noise
    assert abs(standardised("laser", [(*by_row[exchanged][:6], put_back, by_row[exchanged][7])])[0]) < 4.5


@pytest.mark.parametrize("left_in", [(), ("laser",)], ids=["clean", "as-in-the-job"])
def test_least_squares_recovers_the_truth(left_in):
    _, values = parameters()
    rows, residual = [], []
    for source in ("millimetre", "furnace", "laser"):
        lines = read(source) if source in left_in else clean(source)
        sigma = np.array([line[7] for line in lines]) * TRUTH["noise_factors"][source]
        listed = np.array([line[6] for line in lines])
        block = design(lines)
        scale = listed if source == "furnace" else np.zeros(len(lines))
        rows.append(np.column_stack([block, scale]) / sigma[:, None])
        # Residuals about the truth: positions are up to 1e9 times their sigma.
        residual.append((listed - block @ values) / sigma)
    prior = np.zeros(len(values) + 1)
    prior[-1] = 1 / JOB["source"][1]["scale"]
    matrix, target = np.vstack([*rows, prior]), np.concatenate([*residual, [0.0]])
    norms = np.linalg.norm(matrix, axis=0)
    solution, _, rank, singular = np.linalg.lstsq(matrix / norms, target, rcond=None)
    assert rank == matrix.shape[1]
    assert singular[0] / singular[-1] < 1e6
    covariance = np.linalg.inv((matrix / norms).T @ (matrix / norms))
    true_shift = np.append(np.zeros(len(values)), TRUTH["calibration"]["furnace"]["scale"])
    z = (solution / norms - true_shift) / (np.sqrt(np.diag(covariance)) / norms)
    # 18 correlated normal deviates: one of them passes 3.5 in fewer than 1 of 100 campaigns.
    assert np.abs(z).max() < 3.5
    fitted = target - matrix / norms @ solution
    freedom = len(target) - matrix.shape[1]
    # A line left in at 7 sigma adds at the most 49 to chi2, about one of its standard deviations.
    assert abs(fitted @ fitted - freedom) < 4 * np.sqrt(2 * freedom)


def test_job_excludes_only_wrong_lines_and_leaves_one_to_be_found():
    excluded = {(entry["source"], row) for entry in JOB["exclude"] for row in entry["rows"]}
    wrong = {(line["source"], line["row"]) for line in TRUTH["wrong_lines"]}
    assert excluded < wrong
    assert len(wrong - excluded) == 1
    assert all(entry["reason"] for entry in JOB["exclude"])


def test_job_names_columns_that_its_files_have():
    for source in JOB["source"]:
        text = (CAMPAIGN / source["file"]).read_text(encoding="utf-8").splitlines()
        header = next(line for line in text if not line.startswith("#"))
        assert set(source["columns"].values()) == set(re.split(r"[,\s]+", header))
