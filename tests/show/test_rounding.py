"""The printed numbers, read back: lines recomputed from them, and correlation matrices that stay matrices."""

from __future__ import annotations

import re
import warnings
from dataclasses import replace

import numpy as np
import pytest
from reference.thirteen_terms import ISOTOPOLOGUE, TERMS, campaign

from dunhamfit.errors import UsageError
from dunhamfit.fit.model import Prior
from dunhamfit.fit.solve import fit_lines
from dunhamfit.inference.influence import calibration_share
from dunhamfit.lines.line_list import line_columns
from dunhamfit.lines.reading import read_lines
from dunhamfit.molecule.terms import TermSet
from dunhamfit.show import rounding
from dunhamfit.show.fit_report import constants_table
from dunhamfit.show.numbers import parse_value_sigma
from dunhamfit.show.rounding import rounded_constants, rounded_correlation


def fitted(lines, *, policy="stated", terms=TERMS, **more):
    return fit_lines(lines, terms, reference=ISOTOPOLOGUE, policy=policy, **more)


@pytest.fixture(scope="module")
def fit():
    return fitted(campaign(np.random.default_rng(41)), policy="per-source")


@pytest.fixture(scope="module")
def monoxide(shared_reference):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        lines = read_lines(shared_reference / "co_hitran2016_6iso.par", format="hitran", isotopologue={1: "12C16O"})
    return lines


def moves(fit, printed):
    """Move of each used line if the constants of the reference isotopologue become `printed`, by the formula itself.

    The moves are some 1e-10 of the energies: extended precision, and the formula applied to differences.
    """
    lines = fit.lines.subset(fit.lines.used)
    change = {
        (item.k, item.l): np.longdouble(new) - np.longdouble(old)
        for item, new, old in zip(fit.constants, printed, fit.values, strict=False)
    }

    def energy(v, j):
        x, y = v.astype(np.longdouble) + 0.5, (j * (j + 1)).astype(np.longdouble)
        return sum(value * x**k * y**l for (k, l), value in change.items())

    return energy(lines.v_upper, lines.j_upper) - energy(lines.v_lower, lines.j_lower), lines


def test_lines_recomputed_from_the_printed_table_move_by_less_than_a_tenth_of_their_sigma(fit):
    printed = [parse_value_sigma(row[1])[0] for row in constants_table(fit).rows]
    by, lines = moves(fit, printed)
    shift = float(np.max(np.abs(by) / lines.sigma))
    assert shift < 0.1
    # The strictest source has the factor 0.5, and the guard keeps to the smaller sigma.
    assert float(np.max(np.abs(by) / (lines.sigma * np.minimum(fit.noise.factors, 1)[lines.source]))) < 0.1


def test_two_digits_alone_would_not_do(fit):
    """Two digits of sigma for every constant move some line by more than a tenth of its sigma."""
    found = rounded_constants(fit)
    assert found.added
    assert all(d >= 2 for d in found.digits)
    plain = [round(v, -int(np.floor(np.log10(s))) + 1) for v, s in zip(fit.values, fit.sigmas, strict=True)]
    by, lines = moves(fit, plain[: len(fit.constants)])
    assert float(np.max(np.abs(by) / (lines.sigma * np.minimum(fit.noise.factors, 1)[lines.source]))) >= 0.1


def test_the_table_says_so(fit):
    found = rounded_constants(fit)
    notes = " ".join(constants_table(fit).notes)
    assert found.note in notes
    stated = float(re.search(r"less than (\d\.\d\d) of their sigma", found.note)[1])
    assert found.largest_shift < stated <= found.largest_shift + 0.01 + 1e-12
    assert all(name in found.note for name in found.added)


def test_real_lines(monoxide):
    fit = fit_lines(monoxide, TermSet.from_orders([7, 5, 4, 3, 1]), reference="12C16O", policy="per-band")
    found = rounded_constants(fit)
    by, lines = moves(fit, found.values)
    assert float(np.max(np.abs(by) / lines.sigma)) < 0.1
    assert found.values.tolist() == [parse_value_sigma(text)[0] for text in found.texts]


@pytest.mark.parametrize("seed", range(20))
def test_any_campaign_is_guarded(seed):
    fit = fitted(campaign(np.random.default_rng([42, seed]), j_max=int(np.random.default_rng(seed).integers(8, 60))))
    found = rounded_constants(fit)
    by, lines = moves(fit, [parse_value_sigma(text)[0] for text in found.texts])
    assert found.largest_shift == pytest.approx(float(np.max(np.abs(by) / lines.sigma)), rel=1e-4)
    assert found.largest_shift < 0.1


def test_repeats_are_judged_one_by_one():
    """A hundred repeats make a mean ten times as good; each line still has its own sigma."""
    lines = campaign(np.random.default_rng(4), factors=(1, 1, 1), shared=0, calibrated=False, j_max=20)
    columns = {item.name: np.concatenate([getattr(lines, item.name)] * 100) for item in line_columns()}
    many = fitted(replace(lines, **columns))
    found = rounded_constants(many)
    by, used = moves(many, found.values)
    assert found.largest_shift == pytest.approx(float(np.max(np.abs(by) / used.sigma)), rel=1e-4)


def test_lines_that_would_have_to_be_read_are_guarded_by_a_bound(fit, monkeypatch):
    """A fit that goes on from triangles does not read its old lines for a table."""
    monkeypatch.setattr(rounding, "lines_at_hand", lambda _: False)
    found = rounded_constants(fit)
    by, lines = moves(fit, found.values)
    sigma = lines.sigma * np.minimum(fit.noise.factors, 1)[lines.source]
    assert float(np.max(np.abs(by) / sigma)) <= found.largest_shift * (1 + 1e-6) < 0.1


def test_fixed_constants_are_printed_in_full():
    fit = fitted(campaign(np.random.default_rng(5)), priors={"Y13": Prior(-1.0 / 3e15, 0.0)})
    found = rounded_constants(fit)
    place = fit.index(1, 3)
    assert found.digits[place] == 0
    assert float(found.texts[place]) == -1.0 / 3e15


def test_calibration_column(fit):
    table = constants_table(fit)
    place = [column.name for column in table.columns].index("of which calibration")
    shown = np.array([float(row[place]) for row in table.rows])
    # Two digits.
    np.testing.assert_allclose(shown, calibration_share(fit)[: len(fit.constants)], rtol=0.05)
    plain = fitted(campaign(np.random.default_rng(41), calibrated=False))
    assert "of which calibration" not in [column.name for column in constants_table(plain).columns]


# --- correlation matrices ---------------------------------------------------------------------------------


def exact_correlation(fit):
    count = len(fit.constants)
    scale = fit.sigmas[:count]
    return fit.covariance / np.outer(scale, scale)


def test_a_matrix_that_rounding_would_break_is_repaired_with_a_note(fit):
    """One decimal leaves a negative eigenvalue, which numpy confirms; more are added until none is left."""
    broken = np.round(exact_correlation(fit), 1)
    assert np.linalg.eigvalsh(broken)[0] < 0
    found = rounded_correlation(fit, 1)
    assert found.decimals > 1
    assert "with 1 the matrix would not be positive definite" in found.note
    np.linalg.cholesky(found.matrix)
    np.testing.assert_allclose(found.matrix, exact_correlation(fit), atol=0.5 * 10.0**-found.decimals + 1e-12)


@pytest.mark.parametrize("decimals", range(1, 9))
def test_what_is_written_is_positive_definite_and_no_longer_than_needed(fit, decimals):
    found = rounded_correlation(fit, decimals)
    np.linalg.cholesky(found.matrix)
    assert np.array_equal(found.matrix, found.matrix.T) and np.all(np.diag(found.matrix) == 1)
    np.testing.assert_array_equal(found.matrix, np.round(found.matrix, found.decimals))
    for fewer in range(decimals, found.decimals):
        assert np.linalg.eigvalsh(np.round(exact_correlation(fit), fewer))[0] <= 1e-14


def test_real_constants_at_three_decimals(monoxide):
    """Strongly correlated constants of a real list: three decimals cannot hold their matrix."""
    lines = monoxide.excluded(monoxide.v_upper > 5, "left out")
    fit = fit_lines(lines, TermSet.from_orders([5, 4, 3, 2, 1]), reference="12C16O")
    assert np.linalg.eigvalsh(np.round(exact_correlation(fit), 3))[0] < 0
    found = rounded_correlation(fit, 3)
    assert found.decimals > 3
    np.linalg.cholesky(found.matrix)
    wide = fit_lines(monoxide, TermSet.from_orders([7, 5, 4, 3, 1]), reference="12C16O", policy="per-band")
    with pytest.raises(UsageError, match="too strongly correlated"):
        rounded_correlation(wide, 3)


def test_the_note_says_how_well_lines_are_predicted(fit):
    found = rounded_correlation(fit, 4)
    off = float(re.search(r"off by up to (\S+) %", found.note)[1])
    rows = fit.design.rows.whitened[: len(fit.design.row_of), : len(fit.constants)] * fit.sigmas[: len(fit.constants)]
    sigma = [np.sqrt(np.einsum("ij,jk,ik->i", rows, matrix, rows)) for matrix in (found.matrix, exact_correlation(fit))]
    assert off == pytest.approx(100 * np.max(np.abs(sigma[0] / sigma[1] - 1)), rel=0.06)


def test_fixed_constants_have_no_correlation():
    fit = fitted(campaign(np.random.default_rng(5)), priors={"Y13": Prior(-1e-15, 0.0)})
    found = rounded_correlation(fit, 6)
    assert "Y13" not in found.names and len(found.names) == len(found.matrix) == len(TERMS) - 1


@pytest.mark.parametrize("decimals", [0, -1, 16])
def test_wrong_use(fit, decimals):
    with pytest.raises(UsageError, match="1 to 15 decimals"):
        rounded_correlation(fit, decimals)
