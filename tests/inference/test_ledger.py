"""The ledger against refits, a regression with a term for one line, counts of false alarms, and planted lines.

Invented campaigns: `tests.reference.wrong_lines`, and the packaged example, whose wrong lines are stated.
"""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.stats import binom, norm

import dunhamfit
from dunhamfit.fit.record import Fit
from dunhamfit.fit.solve import fit_lines
from dunhamfit.inference.ledger import make_ledger
from dunhamfit.inference.studentised import predicted, studentise
from dunhamfit.job.run import fit_job, job_lines
from dunhamfit.job.tables import Job, read_job
from dunhamfit.lines.line_list import LineList
from dunhamfit.show.ledger_report import ledger_document, ledger_tables
from dunhamfit.show.tables import to_text
from tests.reference.misassigned import ISOTOPOLOGUES, energy
from tests.reference.thirteen_terms import ISOTOPOLOGUE, SIGMA, TERMS
from tests.reference.wrong_lines import lines_of

OTHERS = [3, 40]
CAMPAIGN = Path(dunhamfit.__file__).parent / "examples" / "campaign"


def fitted(lines: LineList, **choices) -> Fit:
    return fit_lines(lines, TERMS, reference=ISOTOPOLOGUE, **choices)


def listed(ledger) -> list[int]:
    return sorted(entry.index for entry in ledger.entries)


def with_two_of_another_isotopologue(lines: LineList) -> LineList:
    """Two lines replaced by the same transitions of 30Si32S."""
    levels = [getattr(lines, name)[OTHERS] for name in ("v_upper", "j_upper", "v_lower", "j_lower")]
    codes, position = np.zeros(len(lines), dtype=int), lines.position.copy()
    codes[OTHERS] = 1
    number = ISOTOPOLOGUES.index("30Si32S")
    position[OTHERS] = energy(number, *levels[:2]) - energy(number, *levels[2:])
    return replace(lines, position=position, isotopologue=codes, isotopologues=(ISOTOPOLOGUE, "30Si32S"))


@pytest.fixture(scope="module")
def job() -> Job:
    return read_job(CAMPAIGN / "sis.toml")


# --- studentised residuals ----------------------------------------------------------------------------------


def test_studentised_residual_is_the_t_value_of_a_term_for_the_line(rng):
    """R. D. Cook and S. Weisberg, Residuals and Influence in Regression (1982): by ordinary regression, numpy."""
    lines, wrong = lines_of(rng, j_max=8, off=6.0)
    fit = fitted(lines, policy="common")
    judged = studentise(fit)
    order = np.empty(len(lines), dtype=int)
    order[fit.design.used] = fit.design.row_of
    matrix = (fit.design.rows.whitened @ fit.factor)[order] / fit.noise.factors[0]
    residual = fit.residuals / lines.sigma
    for index in (*wrong, 0, 50, len(lines) - 1):
        extended = np.column_stack([matrix, np.arange(len(lines)) == index])
        q, r = np.linalg.qr(extended)
        values = np.linalg.solve(r, q.T @ residual)
        rest = residual - extended @ values
        spread = np.linalg.solve(r.T, np.eye(len(r))[-1])
        t = values[-1] / np.sqrt(rest @ rest / (len(lines) - len(r)) * (spread @ spread))
        # The common factor is settled to 1e-5, and the covariance allows for it being estimated (1e-2 of a leverage).
        assert judged.t[index] == pytest.approx(t, rel=2e-3)


@pytest.mark.parametrize("index", [0, 60, 333])
def test_a_line_left_out_is_judged_as_if_it_were_in(rng, index):
    """With known uncertainties both are the same number: (y - prediction) / sqrt(sigma^2 + its variance)."""
    lines, _ = lines_of(rng, wrong=0.0)
    mask = np.arange(len(lines)) == index
    within, without = fitted(lines), fitted(lines.excluded(mask, "a test"))
    inside, outside = studentise(within), studentise(without, mask)
    assert outside.t[index] == pytest.approx(inside.t[index], rel=1e-6)
    assert outside.p[index] == pytest.approx(2 * norm.sf(abs(inside.t[index])), rel=1e-5)
    position, sigma = predicted(without, lines.subset(mask))
    assert_allclose(position, lines.position[mask] - without.residuals[mask], rtol=1e-14)
    assert_allclose(np.hypot(sigma, SIGMA), without.residuals[mask] / outside.t[mask], rtol=1e-9)


def test_leverages_add_up_to_the_parameters(rng):
    lines, _ = lines_of(rng, j_max=20)
    twice = lines.subset(np.repeat(np.arange(len(lines)), 2))  # repeats share a row, and its leverage
    for each in (lines, twice):
        judged = studentise(fitted(each))
        assert judged.leverage.sum() == pytest.approx(len(TERMS), rel=1e-9)
        assert np.all((judged.leverage > 0) & (judged.leverage < 1))


# --- what is listed ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize("policy", ["stated", "common", "per-source", "per-band"])
@pytest.mark.parametrize("robust", ["none", "watson"])
def test_the_planted_lines_are_listed_and_no_others(policy, robust):
    """The bar. A level of 1 % lets one in a hundred lists show one line more; none of these does."""
    rng = np.random.default_rng(5)
    for _ in range(4):
        lines, wrong = lines_of(rng)
        ledger = make_ledger(fitted(lines, policy=policy, robust=robust))
        assert listed(ledger) == wrong.tolist()
        assert ledger.settled and not ledger.remark
        assert ledger.tested == len(lines) and ledger.untested == 0


@pytest.mark.slow
@pytest.mark.parametrize("policy", ["stated", "per-source"])
def test_clean_lists_give_entries_as_seldom_as_promised(policy):
    """Level 10 %, so that 120 lists are enough; each count has a probability above 1e-3 if the promise holds."""
    rng = np.random.default_rng(17)
    found = sum(
        bool(make_ledger(fitted(lines_of(rng, wrong=0.0, j_max=25)[0], policy=policy), level=0.1).entries)
        for _ in range(120)
    )
    assert binom.ppf(1e-3, 120, 0.1) <= found <= binom.ppf(1 - 1e-3, 120, 0.1)


def test_wrong_lines_that_hide_each_other_are_found(rng):
    """The last lines of one band move together, as one wrong line would not: much leverage, small residuals."""
    lines, _ = lines_of(rng, wrong=0.0)
    band = np.flatnonzero((lines.v_upper == 4) & (lines.j_lower >= 57))
    moved = lines.position.copy()
    moved[band] += 12 * SIGMA
    ledger = make_ledger(fitted(replace(lines, position=moved), policy="common"))
    assert listed(ledger) == band.tolist()


def test_gross_lines_do_not_hide_smaller_ones(rng):
    lines, _ = lines_of(rng, wrong=0.0)
    moved = lines.position.copy()
    moved[[30, 400]] += [1e5 * SIGMA, -2e6 * SIGMA]
    moved[[100, 600]] += 9 * SIGMA
    for policy in ("stated", "per-source"):
        ledger = make_ledger(fitted(replace(lines, position=moved), policy=policy))
        assert listed(ledger) == [30, 100, 400, 600]
        assert [entry.index for entry in ledger.entries[:2]] == [400, 30]


def test_a_line_that_alone_tells_something_cannot_be_judged(rng):
    lines = with_two_of_another_isotopologue(lines_of(rng, wrong=0.0, j_max=20)[0])
    only = lines.subset(np.arange(len(lines)) != OTHERS[1])
    ledger = make_ledger(fit_lines(only, TERMS, reference=ISOTOPOLOGUE, breakdown={"Si": ["10"]}))
    assert ledger.untested == 1 and ledger.tested == len(only) - 1 and not ledger.entries


def test_understated_uncertainties_are_no_wrong_lines(rng):
    lines, _ = lines_of(rng, wrong=0.0, factors=(20.0, 20.0, 20.0), j_max=30)
    ledger = make_ledger(fitted(lines))
    assert not ledger.settled and not ledger.shifts
    text = to_text(ledger_tables(ledger)[0], width=100)
    assert "only makes more lines large" in text and "smaller ones are not shown" in text
    assert not make_ledger(fitted(lines, policy="common")).entries


def test_lines_that_cannot_be_left_out_are_listed_all_the_same(rng):
    """Both lines of the only other isotopologue disagree; without them its breakdown term has no data."""
    lines = with_two_of_another_isotopologue(lines_of(rng, wrong=0.0, j_max=20)[0])
    assert not make_ledger(fit_lines(lines, TERMS, reference=ISOTOPOLOGUE, breakdown={"Si": ["10"]})).entries
    moved = lines.position.copy()
    moved[OTHERS] += [300 * SIGMA, -300 * SIGMA]
    fit = fit_lines(replace(lines, position=moved), TERMS, reference=ISOTOPOLOGUE, breakdown={"Si": ["10"]})
    ledger = make_ledger(fit)
    assert listed(ledger) == OTHERS
    assert "cannot be left out" in ledger.remark and "d10_Si" in ledger.remark and not ledger.shifts


# --- what is said ---------------------------------------------------------------------------------------------


def test_nothing_is_excluded_and_constants_are_those_of_refits(rng):
    lines, wrong = lines_of(rng, j_max=30)
    for robust in ("none", "huber"):
        fit = fitted(lines, policy="common", robust=robust)
        before = fit.values.copy()
        ledger = make_ledger(fit)
        assert fit.lines is lines and lines.used.all() and np.array_equal(fit.values, before)
        assert "Nothing was excluded" in ledger.rule
        mask = np.isin(np.arange(len(lines)), wrong)
        without = fitted(lines.excluded(mask, "a test"), policy="common", robust=robust)
        assert [shift.name for shift in ledger.shifts] == list(fit.model.names)
        assert_allclose([shift.value for shift in ledger.shifts], fit.values, rtol=1e-15)
        assert_allclose([shift.without for shift in ledger.shifts], without.values, rtol=1e-12)
        moved = (fit.values - without.values) / without.sigmas
        assert_allclose([shift.size for shift in ledger.shifts], moved, rtol=1e-9)
        entry = ledger.entries[0]
        assert entry.residual == fit.residuals[entry.index]
        assert entry.off == pytest.approx(without.residuals[entry.index], abs=SIGMA)
        assert entry.sigma == pytest.approx(SIGMA, rel=0.2)
        assert (entry.weight < 0.2) == (robust == "huber")


def test_lines_excluded_by_row_are_shown_with_their_reason_and_chosen_ones_are_not(rng):
    lines, wrong = lines_of(rng)
    by_row, by_choice = np.zeros((2, len(lines)), dtype=bool)
    by_row[wrong[:2]], by_choice[lines.j_lower > 55] = True, True
    left_out = lines.excluded(by_row, "blended").excluded(by_choice, "use: j_lower <= 55")
    ledger = make_ledger(fitted(left_out))
    assert [entry.index for entry in ledger.excluded] == wrong[:2].tolist()
    assert {entry.reason for entry in ledger.excluded} == {"blended"}
    assert all(abs(entry.t) > 10 and entry.weight == 0 for entry in ledger.excluded)
    assert listed(ledger) == [index for index in wrong[2:] if lines.j_lower[index] <= 55]


def test_a_clean_list_prints_nothing(rng):
    ledger = make_ledger(fitted(lines_of(rng, wrong=0.0)[0]))
    assert ledger_tables(ledger) == () and ledger_document(ledger)["entries"] == []


def test_tables_and_document_say_the_same(rng):
    lines, wrong = lines_of(rng, off=60.0)
    ledger = make_ledger(fitted(lines, policy="per-source"))
    entries, shifts = ledger_tables(ledger)
    assert len(entries.rows) == len(wrong) and len(shifts.rows) == len(TERMS)
    text = to_text(entries, width=120)
    document = json.loads(json.dumps(ledger_document(ledger)))
    for entry in document["entries"]:
        assert entry["place"] in text and entry["line"] in text
        assert entry["proposal"] is None and "none of the usual slips explains it" in entry["reason"]
    assert [item["name"] for item in document["shifts"]] == [row[0] for row in shifts.rows]


# --- the example -----------------------------------------------------------------------------------------------


@pytest.mark.parametrize("robust", ["none", "huber", "watson", "student"])
def test_the_example_names_its_wrong_lines(job, robust):
    """`truth.json` states three; the job excludes two of them."""
    truth = json.loads((CAMPAIGN / "truth.json").read_text(encoding="utf-8"))["wrong_lines"]
    wrong = {f"{item['source']}:{item['row']}" for item in truth}
    lines = job_lines(job)
    excluded = make_ledger(fit_job(replace(job, robust=robust), lines))
    assert [f"{entry.source}:{entry.place.split(':')[1]}" for entry in excluded.entries] == ["laser:32"]
    assert {f"{entry.source}:{entry.place.split(':')[1]}" for entry in excluded.excluded} == wrong - {"laser:32"}
    assert "44.8911029 THz (digits exchanged)" in excluded.entries[0].reason
    every = make_ledger(fit_job(replace(job, robust=robust), replace(lines, exclusion=np.zeros(len(lines)))))
    named = {f"{entry.source}:{entry.place.split(':')[1]}": entry for entry in every.entries}
    assert set(named) == wrong
    assert named["furnace:305"].diagnosis.proposal.reading == "R(23)"  # "label one too high in J"
    assert named["furnace:72"].diagnosis.proposal is None  # "position 0.004 cm-1 too high"


def test_a_line_in_a_wrong_unit_cannot_hide_behind_a_scale_error(job):
    """The scale error multiplies positions: a position in MHz has all the leverage on it."""
    lines = job_lines(job)
    index = int(np.flatnonzero((lines.source == 1) & lines.used)[100])
    moved = lines.position.copy()
    moved[index] *= 29979.2458
    for policy in ("stated", "per-source"):
        fit = fit_job(replace(job, policy=policy), replace(lines, position=moved))
        ledger = make_ledger(fit)
        assert ledger.entries[0].index == index
        assert ledger.entries[0].diagnosis.proposal.kind == "unit"
        assert ledger.entries[0].diagnosis.proposal.reading.endswith("MHz (in place of cm-1)")
