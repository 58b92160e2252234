"""Least squares against certified and published solutions."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest
from reference.exact_solution import extended_of, least_squares
from reference.nist import Certified, certified_sets
from reference.straight_lines import GUM_H3, GUM_H3_AT_30, STRAIGHT_LINES, StraightLine

from dunhamfit.algebra.least_squares import refine, sharpened
from dunhamfit.algebra.rows import plain_rows
from dunhamfit.algebra.triangle import covariance_factor, solve
from dunhamfit.errors import NotConverged

# Correct digits asked of every coefficient and standard deviation: 13 of the 15 that NIST certifies. The
# residuals of Wampler4 and 5 are up to 1e5 times what the polynomial adds, and the powers of x of Filip
# have condition 5e9 even with columns of unit norm.
DIGITS = {"Filip": 7, "Wampler4": 10, "Wampler5": 10}


def answer(rows):
    triangle = rows.triangle()
    return refine(rows, triangle.r, solve(triangle))


def correct_digits(found, certified) -> float:
    """Fewest correct digits of any entry, at the most 15 (the log relative error that NIST uses)."""
    errors = [
        abs(Fraction(float(f)) - c) / abs(c) if c else abs(Fraction(float(f)))
        for f, c in zip(np.ravel(found), np.ravel(np.array(certified, dtype=object)), strict=True)
    ]
    return min(15.0, -np.log10(max(float(max(errors)), 1e-16)))


@pytest.mark.parametrize("data", certified_sets(), ids=lambda data: data.name)
def test_nist_certified_sets(data: Certified):
    """NIST/ITL Statistical Reference Datasets, linear regression."""
    rows = plain_rows(extended_of(data.matrix), extended_of(data.observed))
    solution = answer(rows)
    free = len(data.observed) - len(data.values)
    factor = np.sqrt(solution.chi2 / free) * covariance_factor(sharpened(rows, solution.r))
    sigmas = np.sqrt((factor**2).sum(axis=1))
    least = DIGITS.get(data.name, 13)
    assert correct_digits(solution.values, data.values) >= least
    assert correct_digits(sigmas, data.sigmas) >= least
    assert correct_digits(np.sqrt(solution.chi2 / free), [data.residual_sigma]) >= least
    # A covariance is judged against the two standard deviations, which are zero where the fit is exact.
    covariance = np.array([[float(x) for x in row] for row in data.covariance])
    size = np.sqrt(np.outer(np.diag(covariance), np.diag(covariance)))
    assert np.all(np.abs(factor @ factor.T - covariance) <= 10.0 ** (1 - least) * size + 1e-26)


@pytest.mark.parametrize("line", STRAIGHT_LINES, ids=lambda line: line.name)
def test_published_straight_lines(line: StraightLine):
    """GUM H.3 and ISO/TS 28037:2010, with variances and the covariance."""
    design = extended_of([[Fraction(1), x] for x in line.x])
    rows = plain_rows(design, line.y, line.sigma or None)
    solution = answer(rows)
    factor = covariance_factor(solution.r)
    if not line.sigma:
        factor = factor * np.sqrt(solution.chi2 / (len(line.y) - 2))
    (a_a, a_b), (_, b_b) = factor @ factor.T
    # The references carry 15 digits.
    assert solution.values == pytest.approx([line.a, line.b], rel=1e-12)
    assert solution.chi2 == pytest.approx(line.chi2, rel=1e-12)
    assert (a_a**0.5, b_b**0.5) == pytest.approx((line.u_a, line.u_b), rel=1e-12)
    assert a_b == pytest.approx(line.covariance, rel=1e-12, abs=1e-12 * line.u_a * line.u_b)


def test_the_correction_of_the_thermometer_at_30_degrees():
    """GUM H.3.5: b(30) with the covariance of intercept and slope."""
    rows = plain_rows(extended_of([[Fraction(1), x] for x in GUM_H3.x]), GUM_H3.y)
    solution = answer(rows)
    factor = covariance_factor(solution.r) * np.sqrt(solution.chi2 / (len(GUM_H3.y) - 2))
    at_30 = np.array([1.0, 10.0])
    found = at_30 @ solution.values, np.linalg.norm(at_30 @ factor)
    assert found == pytest.approx(GUM_H3_AT_30, rel=1e-12)


@pytest.mark.parametrize("seed", range(4))
def test_rows_of_a_large_condition_against_80_digits(seed):
    """Powers of a narrow range, positions 1e9 sigma: every value to 1e-6 sigma, every sigma to nine digits."""
    rng = np.random.default_rng(seed)
    x = [Fraction(i, 40) for i in range(20, 60)]
    matrix = [[value**k for k in range(8)] for value in x]
    observed = np.array([float(sum(row)) for row in matrix]) * 1e4 + rng.normal(size=40) * 1e-5
    sigma = 10.0 ** rng.uniform(-5.5, -4.5, 40)
    rows = plain_rows(extended_of(matrix), observed, sigma)
    solution = answer(rows)
    factor = covariance_factor(sharpened(rows, solution.r))
    values, covariance = least_squares(matrix, observed, sigma)
    sigmas = np.array([float(covariance[i, i]) ** 0.5 for i in range(8)])
    distance = np.array(
        [float(Fraction(v) - Fraction(str(e))) for v, e in zip(solution.values, values, strict=True)]
    )
    assert np.all(np.abs(distance) < 1e-6 * sigmas)
    np.testing.assert_allclose(np.sqrt((factor**2).sum(axis=1)), sigmas, rtol=1e-9)


def test_a_factor_that_is_not_of_these_rows_is_refused(rng):
    design = rng.normal(size=(30, 4))
    rows = plain_rows(design, rng.normal(size=30))
    with pytest.raises(NotConverged, match="did not settle"):
        refine(rows, rows.triangle().r * 0.3, np.zeros(4))
