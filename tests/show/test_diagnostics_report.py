"""Tables that question a fit: what stands out is said, and the numbers are those of the records."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from reference.thirteen_terms import ISOTOPOLOGUE, SIGMA, SOURCES, TERMS, campaign

from dunhamfit.fit.solve import fit_lines
from dunhamfit.inference.influence import influence
from dunhamfit.inference.resample import bootstrap, leave_one_out
from dunhamfit.inference.simulate import LEVELS, Coverage
from dunhamfit.inference.systematics import find_systematics
from dunhamfit.show.diagnostics_report import (
    bootstrap_table,
    coverage_document,
    coverage_tables,
    diagnostics_tables,
    dropped_table,
    influence_table,
    systematics_document,
    systematics_table,
)
from dunhamfit.show.fit_report import fit_tables
from dunhamfit.show.tables import to_text


def fitted(lines, *, policy="stated"):
    return fit_lines(lines, TERMS, reference=ISOTOPOLOGUE, policy=policy)


def clean():
    return campaign(np.random.default_rng(51), factors=(1, 1, 1))


@pytest.fixture(scope="module")
def fit():
    return fitted(clean())


@pytest.fixture(scope="module")
def wavy():
    """One band with a wave along J that no constant can follow."""
    lines = clean()
    wave = 5 * SIGMA * np.sin(lines.j_lower / 3) * ((lines.v_upper == 2) & (lines.v_lower == 1))
    return fitted(replace(lines, position=lines.position + wave))


def test_clean_lines_make_a_silent_table(fit):
    table = systematics_table(find_systematics(fit))
    assert table.rows == ()
    assert "None of" in table.notes[0]
    assert "Systematic residuals" not in [item.title for item in fit_tables(fit)]


def test_what_stands_out_is_said_in_words(wavy):
    found = find_systematics(wavy)
    table = systematics_table(found)
    assert table.rows[0][1] == f"{ISOTOPOLOGUE} 2-1"
    assert "28Si32S 2-1" in table.notes[0] and "runs" in table.notes[0]
    assert fit_tables(wavy)[-1].title == "Systematic residuals"
    assert len(systematics_document(found)) == len(found)


def test_a_model_that_does_not_fit_at_all_is_not_told_at_length():
    lines = clean()
    bad = fit_lines(lines, TERMS.from_orders([2, 1, 0]), reference=ISOTOPOLOGUE)
    table = systematics_table(find_systematics(bad))
    assert len(table.rows) <= 12
    assert any("more tests stand out" in note for note in table.notes)


def test_influence_adds_up(fit):
    table = influence_table(fit, influence(fit))
    for row in table.rows:
        # Each share is rounded to 0.1 %.
        assert sum(map(float, row[1:])) == pytest.approx(100, abs=0.05 * (len(row) - 1) + 1e-9)


def test_bands_that_carry_a_constant_alone_are_named(fit):
    table = dropped_table(fit, leave_one_out(fit, "band"), "band")
    (row,) = (row for row in table.rows if row[0].endswith("4-3"))
    assert "Y40" in row[-1]
    assert not any("nan" in cell or "inf" in cell for row in table.rows for cell in row)


def test_a_band_at_odds_with_the_others_is_pointed_at():
    lines = clean()
    shift = 30 * SIGMA * ((lines.v_upper == 2) & (lines.v_lower == 1))
    odd = fitted(replace(lines, position=lines.position + shift))
    table = dropped_table(odd, leave_one_out(odd, "band"), "band")
    assert "Constants move farther than chance allows" in table.notes[-1]
    assert len(dropped_table(fitted(lines), leave_one_out(fitted(lines), "band"), "band").notes) == 1


def test_bootstrap_table(fit):
    found = bootstrap(fit, resamples=20, seed=1)
    table = bootstrap_table(fit, found)
    assert float(table.rows[0][2]) == pytest.approx(found.sigmas[0], rel=0.05)
    assert "20 resamples by line, seed 1" in table.notes[0]


def made_coverage(bad: bool) -> Coverage:
    z = np.random.default_rng(1).normal(0, 1, (500, 2))
    if bad:
        z[:, 1] *= 2
    return Coverage(
        names=("Y10", "Y20"),
        levels=LEVELS,
        factors=np.array([[1.0, 1.0], [1.96, 1.96]]),
        z=z,
        noise_names=("oven",),
        noise=np.full((500, 1), 2.0),
        noise_true=np.array([2.0]),
        failures=("did not settle",),
        seed=1,
    )


def test_coverage_that_differs_is_pointed_at():
    good, factors = coverage_tables(made_coverage(False))
    bad, _ = coverage_tables(made_coverage(True))
    assert good.notes[-1].startswith("No coverage differs")
    assert bad.notes[-1].endswith("Y20.")
    assert any("1 further sets gave no constants" in note for note in bad.notes)
    assert factors.rows == (("oven", "2.000", "2.000", "0.000"),)


def test_coverage_document():
    found = made_coverage(False)
    document = coverage_document(found)
    assert (document["sets"], document["failed"], document["seed"]) == (500, 1, 1)
    inside = np.mean(np.abs(found.z[:, 1]) <= 1.96)
    assert document["constants"][1]["coverage"][1] == inside


def test_every_table_fits_a_terminal(fit):
    tables = diagnostics_tables(fit)
    assert [item.title for item in tables] == [
        "Systematic residuals",
        "Who determines which constant",
        "Without each source",
        "Without each band",
    ]
    for table in tables:
        assert max(map(len, to_text(table, width=100).splitlines())) <= 100
    assert tables[1].columns[1].name == SOURCES[0]
