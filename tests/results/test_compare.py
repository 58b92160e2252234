"""Comparisons: nothing where nothing changed, the right sigma where something did, and signs that are told."""

from __future__ import annotations

import numpy as np
import pytest
from invented_molecule import BREAKDOWN, CONSTANTS, REFERENCE, TERMS, simulated_lines

from dunhamfit.errors import UsageError
from dunhamfit.fit.solve import fit_lines
from dunhamfit.lines.line_list import LineList, Source, merge
from dunhamfit.molecule.terms import TermSet
from dunhamfit.results.compare import FURTHER_LINES, FURTHER_TERMS, INDEPENDENT, SAME, SHARED, compare, relation_of
from dunhamfit.results.given import constants_of_document, constants_of_fit
from dunhamfit.results.predict import predict_lines


def renamed(lines: LineList, text: str) -> LineList:
    sources = tuple(Source(f"{text} {item.name}") for item in lines.sources)
    columns = {name: getattr(lines, name) for name in lines.__dataclass_fields__}
    return LineList(**{**columns, "sources": sources})


def fitted(lines, terms=TERMS, policy="stated"):
    return fit_lines(lines, terms, reference=REFERENCE, breakdown=BREAKDOWN, policy=policy)


@pytest.fixture(scope="module")
def first():
    return simulated_lines(seed=1, j_max=15)


@pytest.fixture(scope="module")
def both(first):
    return merge([first, renamed(simulated_lines(seed=2, j_max=25), "new")])


def test_identical_sets_give_nothing(first):
    fit = fitted(first)
    found = compare(constants_of_fit(fit, "a"), constants_of_fit(fit, "b"), first, relation=SAME)
    assert all(item.shift == 0.0 for item in found.constants)
    assert (found.lines.largest, found.lines.rms, found.lines.left_out) == (0.0, 0.0, 0)
    assert found.lines.lines == len(first)
    assert found.signs == found.only_old == found.only_new == ()
    assert found.lines_turned is None


def test_what_two_fits_share_is_found(first, both):
    old, new = fitted(first), fitted(both)
    assert relation_of(old, old) == SAME
    assert relation_of(old, new) == FURTHER_LINES
    assert relation_of(new, old) == SHARED
    assert relation_of(old, fitted(renamed(first, "other"))) == INDEPENDENT
    wider = TermSet([*TERMS, (0, 3)])
    assert relation_of(old, fitted(first, wider)) == FURTHER_TERMS
    assert relation_of(old, fitted(both, wider)) == SHARED
    assert relation_of(old, fitted(both, policy="common")) == SHARED
    assert relation_of(old, fitted(both.excluded(both.row == 3, "for this test"))) == SHARED


def test_sigma_of_a_shift_covers():
    """z of nested, wider and independent fits over 100 simulated pairs; mean squares within 4 of their sigma."""
    squares = {FURTHER_LINES: [], FURTHER_TERMS: [], INDEPENDENT: []}
    for seed in range(100):
        lines = simulated_lines(seed=seed, j_max=10)
        more = renamed(simulated_lines(seed=1000 + seed, j_max=12), "new")
        old = fitted(lines)
        others = (fitted(merge([lines, more])), fitted(lines, TermSet([*TERMS, (0, 3)])), fitted(more))
        for relation, new in zip(squares, others, strict=True):
            assert relation_of(old, new) == relation
            found = compare(constants_of_fit(old, "old"), constants_of_fit(new, "new"), lines, relation=relation)
            squares[relation].append([(c.shift / c.sigma_shift) ** 2 for c in found.constants if c.sigma_shift > 0])
    for values in squares.values():
        means = np.mean(values, axis=0)
        assert np.all(np.abs(means - 1) < 4 * np.sqrt(2 / 100))


def test_lines_are_those_that_both_predict(first, both):
    old, new = fitted(first), fitted(both)
    found = compare(constants_of_fit(old, "old"), constants_of_fit(new, "new"), both, relation=FURTHER_LINES)
    moved = np.empty(len(both))
    for code, name in enumerate(both.isotopologues):
        own = both.isotopologue == code
        numbers = [getattr(both, key)[own] for key in ("v_upper", "j_upper", "v_lower", "j_lower")]
        first_, second = (predict_lines(fit, *numbers, isotopologue=name).position for fit in (old, new))
        moved[own] = second - first_
    # Positions are rounded at 1e-13 in the prediction.
    assert found.lines.rms == pytest.approx(np.sqrt(np.mean(moved**2)), rel=1e-6)
    assert abs(found.lines.largest) == pytest.approx(np.abs(moved).max(), rel=1e-6)
    assert found.lines.where == both.label(int(np.argmax(np.abs(moved))))
    band = next(b for b in found.lines.bands if (b.isotopologue, b.v_upper, b.v_lower) == ("72Ge80Se", 3, 1))
    chosen = (both.isotopologue == both.isotopologues.index("72Ge80Se")) & (both.v_upper == 3) & (both.v_lower == 1)
    assert band.lines == chosen.sum()
    assert band.mean == pytest.approx(moved[chosen].mean(), rel=1e-6)
    assert sum(b.lines for b in found.lines.bands) == len(both)


def test_a_sign_convention_is_named(first):
    """D_e, alpha_e and omega_e x_e written where Y02, Y11 and Y20 are meant."""
    fit = fitted(first)
    names = {"Y20": "omega_e x_e", "Y11": "alpha_e", "Y02": "D_e"}
    document = {"constants": {f"Y{k}{l}": -y if f"Y{k}{l}" in names else y for (k, l), y in CONSTANTS.items()}}
    found = compare(constants_of_document(document, "paper", fit), constants_of_fit(fit, "fit"), first)
    assert {item.name for item in found.signs} == set(names)
    for item in found.signs:
        assert f"{names[item.name]} = -{item.name}" in item.text
    assert abs(found.lines.largest) > 1.0
    assert abs(found.lines_turned.largest) < 1e-2
    assert found.lines.left_out == len(first) - np.sum(first.isotopologue == 0)


def test_conventional_names_have_their_signs(first):
    fit = fitted(first)
    y = CONSTANTS
    document = {
        "isotopologue": REFERENCE,
        "constants": [
            {"name": "omega_e", "value": y[1, 0], "sigma": 1e-3},
            {"name": "omega_e x_e", "value": -y[2, 0], "sigma": None},
            {"name": "B_e", "value": y[0, 1] * 29979.2458, "sigma": 0.01, "unit": "MHz"},
            {"name": "alpha_e", "value": -y[1, 1]},
            {"name": "D_e", "value": -y[0, 2]},
        ],
    }
    found = constants_of_document(document, "paper", fit)
    assert found.names == ("Y10", "Y20", "Y01", "Y11", "Y02")
    assert found.values == pytest.approx([y[1, 0], y[2, 0], y[0, 1], y[1, 1], y[0, 2]], rel=1e-14)
    assert found.sigmas[[0, 2]] == pytest.approx([1e-3, 0.01 / 29979.2458])
    result = compare(found, constants_of_fit(fit, "fit"), first)
    assert result.signs == ()
    by_name = {item.name: item for item in result.constants}
    assert by_name["Y10"].sigma_shift == pytest.approx(np.hypot(1e-3, fit.sigma(1, 0)))
    assert by_name["Y20"].sigma_shift == pytest.approx(fit.sigma(2, 0))
    assert by_name["Y20"].why == "one sigma is not known"
    assert {name for name, _ in result.only_new} == {"Y30", "Y21", "Y12", "d10_Ge", "d01_Ge", "d10_Se", "d01_Se"}


def test_another_isotopologue_is_compared_with_its_own(first):
    fit = fitted(first)
    own = constants_of_fit(fit, "fit", "72Ge80Se")
    document = {"isotopologue": "72Ge80Se", "constants": dict(zip(own.names, own.values.tolist(), strict=True))}
    found = compare(constants_of_document(document, "paper", fit), own, first)
    assert abs(found.lines.largest) == 0.0
    assert found.lines.lines == np.sum(first.isotopologue == first.isotopologues.index("72Ge80Se"))


@pytest.mark.parametrize(
    ("document", "message"),
    [
        ({"terms": {}}, "has no 'constants'"),
        ({"constants": 3}, "must be an object, or a list"),
        ({"constants": {"Y00": 1.0}}, "paper: Y00 cannot be determined"),
        ({"constants": {"Y1": 1.0}}, "is not a term"),
        ({"constants": {"d10_Ge": 1.0}}, "there is no term among the constants"),
        ({"constants": {"Y10": "400"}}, "Y10 must be a number"),
        ({"constants": {"Y10": [400.0, -1.0]}}, "its sigma not negative"),
        ({"constants": {"Y10": {"value": 1.0, "unit": "kHz"}}}, "unit of Y10 must be one of"),
        ({"constants": {"Y20": 1.0, "omega_e x_e": 1.0}}, "Y20 is given twice"),
        ({"constants": {"Y10": 1.0}, "isotopologue": "28Si32S"}, "no isotopologue of the molecule"),
    ],
)
def test_other_documents_are_refused(first, document, message):
    with pytest.raises(UsageError, match=message):
        constants_of_document(document, "paper", fitted(first))
