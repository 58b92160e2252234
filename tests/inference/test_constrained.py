"""Fits with relations, priors and bounds, against linear algebra and optimisers of numpy and scipy.

Tolerances in sigma: 1e-8 where only rounding separates two ways to the same minimum.
"""

from __future__ import annotations

import numpy as np
import pytest
from related_lines import NAMES, SIGMA, design, model_of, noisy_lines
from scipy.optimize import least_squares, lsq_linear

from dunhamfit.errors import CannotDetermine, UsageError
from dunhamfit.fit.model import Prior
from dunhamfit.fit.solve import fit_model
from dunhamfit.inference.constrained import fit_constrained
from dunhamfit.inference.relations import Relations

KRATZER = {"Y02": "-4*Y01**3/Y10**2"}
PLACE = {name: i for i, name in enumerate(NAMES)}


@pytest.fixture(scope="module")
def lines():
    return noisy_lines()


def constrained(lines, relations=None, *, priors=None, bounds=None):
    model = model_of(lines, priors=priors)
    return fit_constrained(model, lines, Relations(model, relations or {}), bounds=bounds or {})


def linear(columns: np.ndarray, position: np.ndarray):
    """Values and covariance of a linear fit by numpy, refined once; columns are scaled."""
    scale = np.linalg.norm(columns, axis=0)
    q, r = np.linalg.qr(columns / scale)
    values = np.linalg.solve(r, q.T @ position)
    values = values + np.linalg.solve(r, q.T @ (position - columns / scale @ values))
    inverse = np.linalg.inv(r)
    return values / scale, SIGMA**2 * (inverse @ inverse.T) / np.outer(scale, scale)


def agree(found, expected, sigma, tolerance=1e-8):
    assert np.max(np.abs((np.asarray(found) - expected) / sigma)) < tolerance


def test_no_relation_is_the_plain_fit(lines):
    fit, plain = constrained(lines), fit_model(model_of(lines), lines)
    agree(fit.values, plain.values, plain.sigmas)
    assert np.allclose(fit.covariance, plain.covariance, rtol=1e-8, atol=0)
    for name in ("chi2", "dof", "log_likelihood", "aicc", "bic", "lines", "parameters"):
        assert getattr(fit.statistics, name) == pytest.approx(getattr(plain.statistics, name), rel=1e-9)


def test_kratzers_relation_holds_and_the_minimum_is_that_of_a_general_optimiser(lines):
    """A. Kratzer, Z. Phys. 3, 289 (1920)."""
    fit = constrained(lines, KRATZER)
    y10, _, y01, _, y02 = fit.values
    assert y02 == -4 * y01**3 / y10**2
    columns = design(lines)
    start, scale = fit.values[:4] * (1 + 1e-8), fit.sigmas[:4]

    def residual(step):
        a, b, c, d = start + scale * step
        return (columns @ [a, b, c, d, -4 * c**3 / a**2] - lines.position) / SIGMA

    def slopes(step):
        a, _, c, _ = start + scale * step
        last = np.array([8 * c**3 / a**3, 0, -12 * c**2 / a**2, 0])
        return (columns[:, :4] + np.outer(columns[:, 4], last)) * scale / SIGMA

    found = least_squares(residual, np.zeros(4), jac=slopes, xtol=1e-15, ftol=1e-15, gtol=1e-12)
    # A position of 700 cm-1 is rounded by 1e-9 of its sigma, and the optimiser stops near that.
    agree(fit.values[:4], start + scale * found.x, scale, 1e-6)
    assert fit.statistics.parameters == 4 and fit.statistics.dof == len(lines) - 4
    assert fit.origins["Y02"] == "relation -4*Y01**3/Y10**2"


def test_sigma_follows_by_the_delta_method(lines):
    fit = constrained(lines, KRATZER)
    free = fit.values[:4]

    def related(values):
        return -4 * values[2] ** 3 / values[0] ** 2

    steps = np.diag(1e-5 * np.abs(free))
    slope = np.array([(related(free + s) - related(free - s)) / (2 * s.max()) for s in steps])
    covariance = fit.covariance[:4, :4]
    assert fit.sigma(0, 2) == pytest.approx(np.sqrt(slope @ covariance @ slope), rel=1e-8)
    assert np.allclose(fit.covariance[4, :4], slope @ covariance, rtol=1e-8, atol=0)
    # The free ones: normal equations of the linearised design.
    jacobian = np.vstack([np.eye(4), slope])
    assert np.allclose(covariance, linear(design(lines) @ jacobian, lines.position)[1], rtol=1e-6, atol=0)


@pytest.mark.parametrize(("name", "text", "other", "ratio"), [
    ("Y11", "5.5e-4*Y20", "Y20", 5.5e-4),
    ("Y02", "-8e-7*Y01", "Y01", -8e-7),
])  # fmt: skip
def test_a_linear_relation_is_a_linear_fit_with_one_column_less(lines, name, text, other, ratio):
    fit = constrained(lines, {name: text})
    columns = design(lines)
    columns[:, PLACE[other]] += ratio * columns[:, PLACE[name]]
    free = [i for n, i in PLACE.items() if n != name]
    values, covariance = linear(columns[:, free], lines.position)
    agree(fit.values[free], values, np.sqrt(np.diag(covariance)))
    assert np.allclose(fit.covariance[np.ix_(free, free)], covariance, rtol=1e-7, atol=0)
    assert fit.values[PLACE[name]] == ratio * fit.values[PLACE[other]]
    assert fit.sigmas[PLACE[name]] == pytest.approx(abs(ratio) * fit.sigmas[PLACE[other]], rel=1e-12)


def test_a_relation_determines_what_the_lines_cannot():
    lines = noisy_lines(bands=((1, 0),))
    with pytest.raises(CannotDetermine, match=r"Y10|Y20"):
        fit_model(model_of(lines), lines)
    fit = constrained(lines, {"Y20": "-0.004*Y10"})
    columns = design(lines)
    columns[:, 0] += -0.004 * columns[:, 1]
    values, covariance = linear(columns[:, [0, 2, 3, 4]], lines.position)
    agree(fit.values[[0, 2, 3, 4]], values, np.sqrt(np.diag(covariance)))


def test_kratzers_relation_gives_omega_from_rotation_alone():
    """One band gives Y10 + 2 Y20 only, but Y01 and Y02; Y10 = sqrt(-4 Y01^3/Y02) is then one to one with them."""
    lines = noisy_lines(bands=((1, 0),))
    fit = constrained(lines, KRATZER)
    (band, y01, _, y02), covariance = linear(design(lines)[:, [0, 2, 3, 4]], lines.position)
    y10 = np.sqrt(-4 * y01**3 / y02)
    slope = y10 * np.array([0, 1.5 / y01, 0, -0.5 / y02])
    sigma = np.sqrt(slope @ covariance @ slope)
    # Nonlinear, so that the slope of the map is taken at points that differ by the last step: 1e-6 sigma.
    agree(fit.values[:2], [y10, (band - y10) / 2], [sigma, sigma / 2], 1e-6)
    assert fit.sigma(1, 0) == pytest.approx(sigma, rel=1e-6)


def test_a_fixed_value_is_a_column_moved_to_the_other_side(lines):
    fit = constrained(lines, priors={"Y20": Prior(-2.75, 0.0, "another work")})
    columns = design(lines)
    free = [0, 2, 3, 4]
    values, covariance = linear(columns[:, free], lines.position + 2.75 * columns[:, 1])
    agree(fit.values[free], values, np.sqrt(np.diag(covariance)))
    assert fit.values[1] == -2.75 and fit.sigmas[1] == 0
    assert fit.origins["Y20"] == "fixed value from another work"


def test_a_prior_is_one_more_row_and_comes_after_or_before_the_lines_alike(lines):
    """Weighted means: a Gaussian prior is a measurement of the constant."""
    prior = Prior(-2.7503, 4e-5, "another work")
    full = fit_model(model_of(lines, priors={"Y20": prior}), lines)
    through = constrained(lines, priors={"Y20": prior})
    agree(through.values, full.values, full.sigmas)
    assert np.allclose(through.covariance, full.covariance, rtol=1e-8, atol=0)
    row = np.zeros((1, 5))
    row[0, 1] = SIGMA / prior.sigma
    columns = np.vstack([design(lines), row])
    values, covariance = linear(columns, np.append(lines.position, prior.value * SIGMA / prior.sigma))
    agree(full.values, values, full.sigmas)
    assert np.allclose(full.covariance, covariance, rtol=1e-7, atol=0)
    # The gain of a sequential update, on the fit without the prior.
    alone = fit_model(model_of(lines), lines)
    gain = alone.covariance[:, 1] / (alone.covariance[1, 1] + prior.sigma**2)
    # 1e-10 sigma is what is asked for; the last place of Y10 is 1e-9 of its sigma here.
    places = np.spacing(np.abs(full.values)) / full.sigmas
    after = alone.values + gain * (prior.value - alone.values[1])
    assert np.all(np.abs(after - full.values) / full.sigmas <= 1e-10 + 4 * places)
    covariance = alone.covariance - np.outer(gain, alone.covariance[1])
    assert np.allclose(covariance, full.covariance, rtol=1e-9, atol=0)


def test_a_bound_that_does_not_hold_changes_nothing(lines):
    plain = constrained(lines, KRATZER)
    fit = constrained(lines, KRATZER, bounds={"Y20": (-10.0, 0.0), "Y11": (-1.0, 1.0)})
    agree(fit.values, plain.values, plain.sigmas)
    assert np.allclose(fit.covariance, plain.covariance, rtol=1e-9, atol=0)
    assert fit.warnings == ()


@pytest.mark.parametrize("moved", [
    {"Y11": (2.0, 90.0)},
    {"Y11": (-np.inf, -3.0)},
    {"Y01": (2.0, np.inf), "Y11": (1.0, 9.0)},
    {"Y01": (0.5, 9.0), "Y02": (0.5, 9.0)},
    {"Y10": (-9.0, -1.0), "Y20": (-9.0, -0.5), "Y02": (-8.0, 8.0)},
    {"Y10": (0.2, 9.0), "Y20": (0.2, 9.0), "Y11": (-5.0, 5.0)},
    # Correlated, so that moving the one to its bound takes the other, which starts outside, well inside.
    {"Y10": (9.0, np.inf), "Y20": (-np.inf, -1.0)},
    {"Y01": (9.0, 20.0), "Y11": (-20.0, -1.0)},
    {"Y01": (9.0, 20.0), "Y02": (1.0, 20.0)},
])  # fmt: skip
def test_bounds_hold_where_a_general_solver_says_so(lines, moved):
    """Against bounded linear least squares of scipy, in units of sigma about the plain fit."""
    plain = fit_model(model_of(lines), lines)
    bounds = {n: tuple(plain.values[PLACE[n]] + np.array(b) * plain.sigmas[PLACE[n]]) for n, b in moved.items()}
    fit = constrained(lines, bounds=bounds)
    low, high = np.full(5, -np.inf), np.full(5, np.inf)
    for name, pair in moved.items():
        low[PLACE[name]], high[PLACE[name]] = pair
    # The triangle of the plain fit's covariance stands for the lines: chi2 = least + |L^-1 step|^2.
    whitening = np.linalg.inv(np.linalg.cholesky(plain.covariance / np.outer(plain.sigmas, plain.sigmas)))
    expected = lsq_linear(whitening, np.zeros(5), bounds=(low, high), method="bvls")
    # The covariance is good to some 1e-9 and its inverse amplifies that by its condition, 1e3 here.
    agree(fit.values, plain.values + expected.x * plain.sigmas, plain.sigmas, 1e-5)
    at_bound = [n for n, mask in zip(NAMES, expected.active_mask, strict=True) if mask]
    assert fit.warnings == tuple(
        f"{name} stands at a bound of {list(bounds[name])} cm-1: its sigma is shown as 0, and those of other "
        "constants take it as known"
        for name in at_bound
    )
    for name in at_bound:
        assert fit.values[PLACE[name]] in bounds[name] and fit.sigmas[PLACE[name]] == 0
    free = [i for n, i in PLACE.items() if n not in at_bound]
    covariance = linear(design(lines)[:, free], lines.position)[1]
    sizes = np.sqrt(np.diag(covariance))
    found = fit.covariance[np.ix_(free, free)] / np.outer(sizes, sizes)
    assert np.allclose(found, covariance / np.outer(sizes, sizes), rtol=0, atol=1e-7)


@pytest.mark.parametrize(
    ("bounds", "message"),
    [
        ({"Y02": (0, 1)}, "bounds: 'Y02' is not free; free are Y10, Y20, Y01, Y11"),
        ({"Y03": (0, 1)}, "bounds: 'Y03' is not free; free are Y10, Y20, Y01, Y11"),
        ({"Y11": (1, 1)}, "bounds: 'Y11' must lie between a lower and a higher value (got 1 and 1)"),
        ({"Y11": (0, np.nan)}, "bounds: 'Y11' must lie between a lower and a higher value (got 0 and nan)"),
    ],
)
def test_bounds_that_are_refused(lines, bounds, message):
    with pytest.raises(UsageError) as caught:
        constrained(lines, KRATZER, bounds=bounds)
    assert str(caught.value) == message
