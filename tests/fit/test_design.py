"""Design rows against exact rational arithmetic, and the pooling of repeats against their definition."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest
from simulated import (
    BREAKDOWN,
    BREAKDOWN_TRUTH,
    REFERENCE,
    TERMS,
    TRUTH,
    band,
    campaign,
    noisy,
    reordered,
    with_columns,
)

from dunhamfit.errors import CannotDetermine, UsageError
from dunhamfit.fit.design import build_design, calculate
from dunhamfit.fit.model import Prior
from dunhamfit.fit.solve import make_model
from dunhamfit.lines.line_list import Source, merge
from dunhamfit.molecule.terms import TermSet


def model_of(lines, terms=TERMS, **options):
    return make_model(lines, terms, reference=REFERENCE, **options)


def test_rows_of_the_reference_are_the_exact_monomials_to_the_last_place():
    """High terms and high J, where levels of 1e27 differ by parts in a hundred."""
    lines = merge([band("1-0", j_max=150), band("9-7", j_max=90, source=Source("other"))])
    terms = TermSet.from_orders([9, 6, 5, 4, 3, 2])
    design = build_design(model_of(lines, terms), lines)
    rows = design.rows.matrix.rounded(0, len(design.rows.scale))
    for place in range(0, len(lines), 7):
        index = design.row_of[place]
        for i, term in enumerate(terms):
            upper, lower = (
                Fraction(2 * int(v) + 1, 2) ** term.k * Fraction(int(j) * (int(j) + 1)) ** term.l
                for v, j in (
                    (lines.v_upper[place], lines.j_upper[place]),
                    (lines.v_lower[place], lines.j_lower[place]),
                )
            )
            exact = float(upper - lower)
            assert abs(rows[i, index] - exact) <= np.spacing(abs(exact))


def test_groups_are_bands_of_one_source_and_isotopologue():
    lines = campaign()
    order = np.random.default_rng(1).permutation(len(lines))
    design = build_design(model_of(lines, breakdown=BREAKDOWN), reordered(lines, order))
    shuffled = reordered(lines, order)
    assert len(design.groups) == 6
    groups = design.groups
    for index in range(len(groups)):
        members = design.used[design.group_of == index]
        for column, code in (
            (shuffled.source, groups.source),
            (shuffled.isotopologue, groups.isotopologue),
            (shuffled.v_upper, groups.v_upper),
            (shuffled.v_lower, groups.v_lower),
        ):
            assert np.all(column[members] == code[index])
        assert groups.lines[index] == len(members) == design.rows.lines[index]
    assert groups.lines.sum() == len(lines)
    np.testing.assert_array_equal(design.rows.starts, np.append(0, np.cumsum(groups.lines)))


def test_repeats_pool_to_the_weighted_mean():
    rng = np.random.default_rng(3)
    clean = band("1-0", j_max=5)
    lines = reordered(clean, np.repeat(np.arange(len(clean)), 4))
    lines = with_columns(lines, sigma=rng.uniform(0.5e-4, 2e-4, len(lines)))
    lines = noisy(lines, 4)
    design = build_design(model_of(lines, TermSet([(1, 0), (0, 1)])), lines)
    assert len(design.rows.scale) == len(clean)
    assert list(design.rows.lines) == [len(lines)]
    spread = 0.0
    for row in range(len(clean)):
        mine = design.row_of == row
        weight = 1 / lines.sigma[mine] ** 2
        mean = weight @ lines.position[mine] / weight.sum()
        assert design.rows.observed.high[row] + design.rows.observed.low[row] == pytest.approx(
            mean, rel=1e-15
        )
        assert design.rows.scale[row] ** 2 == pytest.approx(weight.sum(), rel=1e-13)
        spread += weight @ (lines.position[mine] - mean) ** 2
    assert design.rows.spread[0] == pytest.approx(spread, rel=1e-6)
    assert design.rows.log_sigma[0] == pytest.approx(np.log(lines.sigma).sum(), rel=1e-13)


def test_priors_are_the_last_group():
    source = Source("grating", offset=1e-4, scale=np.inf)
    lines = band("1-0", source=source, j_max=5)
    model = model_of(lines, TermSet([(1, 0), (0, 1)]), priors={"Y01": Prior(0.29, 1e-5)})
    assert model.names == ("Y10", "Y01", "offset[grating]", "scale[grating]")
    design = build_design(model, lines)
    assert list(design.rows.lines) == [len(lines), 2]
    rows = design.rows.matrix.rounded(len(lines), len(lines) + 2)
    np.testing.assert_array_equal(rows.T, [[0, 1, 0, 0], [0, 0, 1, 0]])
    np.testing.assert_allclose(design.rows.observed.high[-2:], [0.29, 0.0])
    np.testing.assert_allclose(design.rows.scale[-2:], [1e5, 1e4])
    lines_part = design.rows.matrix.rounded(0, len(lines))
    np.testing.assert_array_equal(lines_part[2], np.ones(len(lines)))
    np.testing.assert_array_equal(np.sort(lines_part[3]), np.sort(lines.position))


def test_positions_are_calculated_for_excluded_lines_too():
    lines = campaign()
    model = model_of(lines, breakdown=BREAKDOWN)
    truth = {f"Y{k}{l}": value for (k, l), value in TRUTH.items()}
    truth |= {f"d{k}{l}_{atom}": value for (atom, k, l), value in BREAKDOWN_TRUTH.items()}
    values = np.array([truth[name] for name in model.names])
    mask = np.arange(len(lines)) % 2 == 0
    found = calculate(model, lines.excluded(mask, "test"), values)
    np.testing.assert_allclose(found.high + found.low, lines.position, atol=1e-12)


def test_lines_of_another_molecule_stay_open():
    lines = merge([band("1-0", j_max=3), with_columns(band("1-0", j_max=2), isotopologues=("12C16O",))])
    found = calculate(model_of(band("1-0"), TermSet([(1, 0), (0, 1)])), lines, np.array([640.0, 0.29]))
    assert np.isfinite(found.high[:7]).all()
    assert np.isnan(found.high[7:]).all()


def test_no_used_line_is_refused():
    lines = band("1-0", j_max=3)
    none = lines.excluded(np.ones(len(lines), dtype=bool), "all of it")
    with pytest.raises(
        CannotDetermine, match="no line is used: every line is excluded, or the list is empty"
    ):
        build_design(model_of(lines), none)


def test_a_prior_of_no_constant_is_refused():
    with pytest.raises(UsageError, match="'Y90' is fixed but is not a term of the model"):
        model_of(band("1-0"), priors={"Y90": Prior(1.0, 0.0)})


def test_breakdown_terms_belong_to_an_atom_and_a_term():
    with pytest.raises(
        UsageError, match=r"breakdown term d10_N: 28Si32S has no atom N \(its atoms are Si, S\)"
    ):
        model_of(band("1-0"), breakdown={"N": ["10"]})
    with pytest.raises(
        UsageError, match="breakdown term d30_S belongs to Y30, which is not among the terms; add it"
    ):
        model_of(band("1-0"), breakdown={"S": ["30"]})
