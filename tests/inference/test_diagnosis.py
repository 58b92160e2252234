"""Slips of labelling and copying, planted into invented lists (`tests.reference.misassigned`)."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from dunhamfit.fit.record import Fit
from dunhamfit.fit.solve import fit_lines
from dunhamfit.inference.diagnosis import diagnose
from dunhamfit.inference.ledger import make_ledger
from dunhamfit.lines.line_list import LineList
from tests.reference.misassigned import KINDS, clean_lines, plant
from tests.reference.thirteen_terms import TERMS


def fitted(lines: LineList, policy: str = "stated") -> Fit:
    return fit_lines(lines, TERMS, reference="28Si32S", policy=policy)


def relabelled(lines: LineList, index: int, **levels: int) -> LineList:
    columns = {}
    for name, value in levels.items():
        columns[name] = getattr(lines, name).copy()
        columns[name][index] = value
    return replace(lines, **columns)


def find(lines: LineList, source: int, v_upper: int, v_lower: int, j_upper: int, j_lower: int, code: int = 0) -> int:
    found = (lines.source == source) & (lines.isotopologue == code)
    for name, value in (("v_upper", v_upper), ("v_lower", v_lower), ("j_upper", j_upper), ("j_lower", j_lower)):
        found &= getattr(lines, name) == value
    return int(np.flatnonzero(found)[0])


def one_diagnosis(lines: LineList, index: int):
    """Diagnosis of one line by a fit without it and without its twin."""
    mask = np.zeros(len(lines), dtype=bool)
    mask[index] = True
    fit = fitted(lines.excluded(mask, "a test"))
    return diagnose(fit, [index], lines.sigma)[0]


@pytest.fixture(scope="module")
def clean() -> LineList:
    return clean_lines(np.random.default_rng(3))


def test_the_message_says_what_where_and_that_nothing_was_changed(clean):
    index = find(clean, 1, 1, 0, 9, 10)  # P(10)
    found = one_diagnosis(relabelled(clean, index, j_upper=11), index)
    assert found.text.startswith("28Si32S 1-0 R(10) is -12.")
    assert "sigma) off; as P(10) it fits to " in found.text
    assert found.text.endswith("sigma. Not changed; confirm.")
    assert (found.proposal.kind, found.proposal.reading) == ("branch", "P(10)")
    assert found.possible == (found.proposal,)


@pytest.mark.parametrize(
    ("levels", "kind", "reading"),
    [
        ({"j_upper": 11}, "branch", "P(10)"),
        ({"j_upper": 10, "j_lower": 9}, "J exchanged", "P(10)"),
        ({"j_upper": 10, "j_lower": 11}, "J", "P(10)"),
        ({"j_upper": 8, "j_lower": 9}, "J", "P(10)"),
        ({"v_upper": 3, "v_lower": 2}, "v", "2-1 P(10)"),
        ({"v_upper": 1, "v_lower": 0}, "v", "2-1 P(10)"),
        ({"v_upper": 3}, "v", "2-1 P(10)"),
        ({"v_lower": 0}, "v", "2-1 P(10)"),
        ({"v_upper": 1, "v_lower": 2}, "v exchanged", "2-1 P(10)"),
        ({"v_upper": 1, "j_upper": 10, "v_lower": 2, "j_lower": 9}, "levels exchanged", "2-1 P(10)"),
        ({"isotopologue": 2}, "isotopologue", "28Si32S P(10)"),
    ],
)
def test_every_slip_of_a_label(clean, levels, kind, reading):
    index = find(clean, 1, 2, 1, 9, 10)
    found = one_diagnosis(relabelled(clean, index, **levels), index)
    assert (found.proposal.kind, found.proposal.reading) == (kind, reading)
    assert found.proposal.fits < 4


@pytest.mark.parametrize(
    ("source", "levels", "factor", "reading"),
    [
        (1, (1, 0, 9, 10), 29979.2458, "MHz (in place of cm-1)"),
        (1, (1, 0, 9, 10), 29.9792458, "GHz (in place of cm-1)"),
        (1, (1, 0, 9, 10), 0.0299792458, "THz (in place of cm-1)"),
        (2, (2, 0, 9, 10), 1 / 0.0299792458, "cm-1 (in place of THz)"),
        (0, (1, 1, 9, 8), 1e-3, "GHz (in place of MHz)"),
        (0, (1, 1, 9, 8), 1 / 29979.2458, "cm-1 (in place of MHz)"),
    ],
)
def test_every_unit(clean, source, levels, factor, reading):
    """1 cm-1 = 29979.2458 MHz, by the definition of the metre."""
    v_upper, v_lower, j_upper, j_lower = levels
    index = find(clean, source, v_upper, v_lower, j_upper, j_lower)
    position = clean.position.copy()
    position[index] *= factor
    found = one_diagnosis(replace(clean, position=position), index)
    assert found.proposal.kind == "unit" and found.proposal.reading.endswith(reading)


def test_a_wavelength_read_as_a_wavenumber(clean):
    index = find(clean, 1, 1, 0, 9, 10)
    position = clean.position.copy()
    position[index] = round(1e4 / position[index], 8)
    found = one_diagnosis(replace(clean, position=position), index)
    assert found.proposal.reading.endswith("um (in place of cm-1)")


def test_exchanged_digits_are_found_with_their_trailing_zeros(clean):
    """The text is not kept, but the other lines of the source have five decimals."""
    printed = np.round(clean.position * 1e5).astype(int)
    index = int(np.flatnonzero((clean.source == 1) & (printed % 10 == 0) & (printed // 10**6 % 11 != 0))[0])
    text = f"{clean.position[index]:.5f}"
    position = clean.position.copy()
    position[index] = float(text[1] + text[0] + text[2:])
    found = one_diagnosis(replace(clean, position=position), index)
    assert (found.proposal.kind, found.proposal.reading) == ("digits", f"{text} cm-1 (digits exchanged)")


def test_what_fits_a_small_error_is_never_proposed(clean):
    """Some six sigma, by the last two digits: one in several wrong lines of this size fits an exchange by chance."""
    printed = np.round(clean.position * 0.0299792458 * 1e7).astype(int)
    tens, ones = printed // 10 % 10, printed % 10
    index = int(np.flatnonzero((clean.source == 2) & (np.abs(tens - ones) >= 8))[0])
    position = clean.position.copy()
    position[index] += 9 * (ones - tens)[index] * 1e-7 / 0.0299792458
    found = one_diagnosis(replace(clean, position=position), index)
    assert found.proposal is None
    assert [item.reading for item in found.possible] == [f"{printed[index] / 1e7:.7f} THz (digits exchanged)"]
    assert "which may be chance at this size. Not changed; confirm." in found.text


def test_a_line_that_is_there_already_is_no_remedy(clean):
    """P(11) labelled P(10) beside the real P(10), and P(11) there as well: one of the two is a copy."""
    index = find(clean, 1, 1, 0, 9, 10)
    twin = find(clean, 1, 1, 0, 10, 11)
    position = clean.position.copy()
    position[index] = position[twin]
    found = one_diagnosis(replace(clean, position=position), index)
    assert found.proposal is None and len(found.possible) == 1
    assert f"as P(11) it fits to {found.possible[0].fits:.1f} sigma, but the list has that line already" in found.text
    assert clean.place(twin) in found.text


def test_two_remedies_are_none(clean):
    """Labelled P(10), half-way between R(9) and R(10), and too uncertain to tell them apart."""
    index = find(clean, 1, 1, 0, 9, 10)
    position, sigma = clean.position.copy(), clean.sigma.copy()
    position[index] = (position[find(clean, 1, 1, 0, 10, 9)] + position[find(clean, 1, 1, 0, 11, 10)]) / 2
    sigma[index] = 0.2
    found = one_diagnosis(replace(clean, position=position, sigma=sigma), index)
    assert found.proposal is None
    assert {item.reading for item in found.possible} == {"R(9)", "R(10)"}
    assert found.text.endswith("no remedy is proposed.")


def test_an_error_of_no_kind_says_so(clean):
    index = find(clean, 1, 1, 0, 9, 10)
    position = clean.position.copy()
    position[index] += 0.0471
    found = one_diagnosis(replace(clean, position=position), index)
    assert found.proposal is None and not found.possible
    assert found.text.endswith("none of the usual slips explains it.")


@pytest.mark.slow
@pytest.mark.parametrize("policy", ["stated", "per-source"])
def test_planted_slips_get_the_right_proposal(policy):
    """The bar: at least 95 % of 200, here 100 for each of two error policies."""
    rng = np.random.default_rng(11)
    right = 0
    for number in range(100):
        lines, slip = plant(clean_lines(rng), KINDS[number % len(KINDS)], rng)
        entries = {entry.index: entry for entry in make_ledger(fitted(lines, policy)).entries}
        found = entries[slip.index].diagnosis.proposal if slip.index in entries else None
        right += found is not None and found.kind == slip.kind and found.reading.startswith(slip.reading)
    assert right >= 95


@pytest.mark.slow
def test_clean_lists_get_no_proposal():
    """The bar: none in 200 lists."""
    rng = np.random.default_rng(12)
    for _ in range(200):
        for entry in make_ledger(fitted(clean_lines(rng))).entries:
            assert entry.diagnosis.proposal is None
