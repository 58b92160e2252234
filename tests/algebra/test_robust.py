"""Robust losses against numerical derivatives, quadrature, densities and published efficiencies."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.integrate import quad
from scipy.optimize import minimize_scalar
from scipy.stats import norm, t

from dunhamfit.algebra.robust import LOSSES, Huber, Plain, Student, Watson, loss
from dunhamfit.errors import UsageError

NAMES = sorted(LOSSES)
U = np.linspace(-9.0, 9.0, 301)


@pytest.mark.parametrize("name", NAMES)
def test_psi_is_the_derivative_of_rho(name):
    step = 1e-5
    slope = (loss(name).rho(U + step) - loss(name).rho(U - step)) / (2 * step)
    # Central differences: step^2 from curvature, 1e-16/step from rounding, step/2 at the kink of Huber's psi.
    assert_allclose(loss(name).psi(U), slope, atol=1e-5)


@pytest.mark.parametrize("name", NAMES)
def test_slope_is_the_derivative_of_psi(name):
    step = 1e-5
    u = U + 1e-3  # off the kinks of Huber's psi
    slope = (loss(name).psi(u + step) - loss(name).psi(u - step)) / (2 * step)
    # Central differences: step^2 from curvature and 1e-16/step from rounding.
    assert_allclose(loss(name).slope(u), slope, atol=1e-8)


@pytest.mark.parametrize("item", [*LOSSES.values(), Watson(alpha=0.2), Huber(k=2.0), Student(nu=7.0)])
def test_log_norm_is_the_integral_by_quadrature(item):
    area = 2 * quad(lambda u: np.exp(-item.rho(u)), 0, np.inf, limit=200)[0]
    assert item.log_norm == pytest.approx(np.log(area), abs=1e-7)  # what quad claims for such tails


@pytest.mark.parametrize("name", NAMES)
def test_weights_fall_with_size_and_ignore_the_sign(name):
    weights = loss(name).weight(np.linspace(0.0, 1e6, 1001))
    assert np.all(np.diff(weights) <= 0) and np.all(weights > 0)
    assert_allclose(loss(name).weight(-U), loss(name).weight(U))
    assert_allclose(loss(name).psi(U), loss(name).weight(U) * U)


@pytest.mark.parametrize("limit", [Watson(alpha=1e-12), Huber(k=np.inf), Student(nu=1e12)])
def test_infinite_threshold_is_least_squares(limit):
    # u^2/1e12 is what is left of the threshold; log1p loses nothing.
    assert_allclose(limit.weight(U), Plain().weight(U), rtol=1e-9)
    assert_allclose(limit.rho(U), U**2 / 2, rtol=1e-9)


def test_watson_is_the_published_weight():
    """J. K. G. Watson, J. Mol. Spectrosc. 219, 326 (2003), from memory: 1/(sigma^2 + r^2/3)."""
    sigma, residual = 2e-4, np.array([0.0, 1e-4, 5e-3])
    assert_allclose(loss("watson").weight(residual / sigma) / sigma**2, 1 / (sigma**2 + residual**2 / 3))
    assert_allclose(Watson(alpha=0.25).weight(U) * 5 / 4, Student(nu=4).weight(U))


def test_student_is_minus_the_log_density():
    density = t(df=4).logpdf
    assert_allclose(loss("student").rho(U), density(0) - density(U), rtol=1e-12)


def test_huber_has_its_published_efficiency():
    """k = 1.345 is 95 % efficient: P. W. Holland and R. E. Welsch, Commun. Stat. A6, 813 (1977), from memory."""
    assert loss("huber").efficiency == pytest.approx(0.95, abs=5e-5)
    assert loss("huber").consistency == pytest.approx(2 * norm.cdf(1.345) - 1, abs=1e-6)


@pytest.mark.parametrize("name", NAMES)
def test_normal_means_agree_with_quadrature(name):
    chosen = loss(name)
    # Huber's kink limits the trapezoidal rule to some 1e-6.
    mean = quad(lambda u: float(chosen.psi(u)) * u * norm.pdf(u), -12, 12, points=[-1.345, 1.345])[0]
    square = quad(lambda u: float(chosen.psi(u)) ** 2 * norm.pdf(u), -12, 12, points=[-1.345, 1.345])[0]
    assert chosen.consistency == pytest.approx(mean, abs=2e-6)
    assert chosen.efficiency == pytest.approx(mean**2 / square, abs=2e-6)


@pytest.mark.parametrize("name", ["watson", "huber", "student"])
def test_reweighted_location_is_the_minimum_and_resists_outliers(name, rng):
    chosen = loss(name)
    values = np.concatenate([rng.normal(size=200), np.full(10, 30.0)])
    centre = 0.0
    for _ in range(200):
        weights = chosen.weight(values - centre)
        centre = weights @ values / weights.sum()
    search = minimize_scalar(
        lambda c: chosen.rho(values - c).sum(), bounds=(-1, 1), method="bounded", options={"xatol": 1e-9}
    )
    assert centre == pytest.approx(search.x, abs=1e-6)
    # Ten lines at 30 sigma pull the mean by 1.4; the standard error of 200 is 0.07.
    assert abs(centre) < 0.3 < values.mean()


def test_unknown_names_and_thresholds_are_refused():
    with pytest.raises(UsageError, match="'tukey' is not known; use one of none, watson, huber, student"):
        loss("tukey")
    with pytest.raises(UsageError, match=r"k of a robust loss must be positive \(got 0\)"):
        Huber(k=0)
    with pytest.raises(UsageError, match="alpha"):
        Watson(alpha=-1.0)
    with pytest.raises(UsageError, match="nu"):
        Student(nu=float("nan"))
