"""The laws of single lines, and the draws that the sampler makes from them, against scipy.stats."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import integrate, stats

from dunhamfit.inference import quadratic
from dunhamfit.inference.error_models import OutlierErrors, StudentErrors
from dunhamfit.inference.proposal import InverseChiSquare, draw_log_factors

T = np.linspace(-30, 30, 7)[None, :]
OUTLIER_THETA = np.array([[np.log(0.03 / 0.97), np.log(8.0)]])


@pytest.fixture
def random(rng):
    return np.random.RandomState(np.random.MT19937(rng.integers(2**32)))


def test_student_likelihood():
    expected = stats.t.logpdf(T, 3.7).sum()
    assert StudentErrors().log_likelihood(T, np.log([[3.7]]))[0] == pytest.approx(expected, rel=1e-12)


def test_outlier_likelihood():
    expected = np.log(0.97 * stats.norm.pdf(T) + 0.03 * stats.norm.pdf(T, scale=8.0)).sum()
    assert OutlierErrors().log_likelihood(T, OUTLIER_THETA)[0] == pytest.approx(expected, rel=1e-12)


def test_student_prior_is_the_gamma_law_it_states():
    log_nu = np.linspace(0.1, 4, 5)[:, None]
    expected = stats.gamma.logpdf(np.exp(log_nu[:, 0]), 2, scale=10) + log_nu[:, 0]
    found = StudentErrors().log_prior(log_nu)
    assert found - found[0] == pytest.approx(expected - expected[0], abs=1e-12)
    assert StudentErrors().log_prior(np.array([[-0.01]]))[0] == -np.inf


def test_outlier_prior_is_what_it_states():
    """Beta(1, 19): mean 5 %, 95 % below 15 %; on the scale of logit e its density integrates to one."""
    assert stats.beta(1, 19).mean() == pytest.approx(0.05)
    assert 0.94 < stats.beta(1, 19).cdf(0.15) < 0.96
    errors = OutlierErrors()

    def density(x):
        return float(np.exp(errors.log_prior(np.array([[x, np.log(10.0)]])))[0])

    # Without its constant, 19, the law integrates to 1/19.
    assert integrate.quad(density, -40, 40)[0] == pytest.approx(1 / 19, rel=1e-8)
    assert errors.log_prior(np.array([[0.0, np.log(2.9)], [0.0, np.log(1001.0)]])).max() == -np.inf


@pytest.mark.parametrize(
    ("errors", "theta"), [(StudentErrors(), np.log([[3.0], [7.0]])), (OutlierErrors(), np.repeat(OUTLIER_THETA, 2, 0))]
)
def test_own_parameters_go_there_and_back(errors, theta):
    assert errors.theta(errors.natural(theta)) == pytest.approx(theta, rel=1e-12)


def test_student_weights_follow_their_gamma_law(random):
    t, nu = 2.5, 4.0
    weights = StudentErrors().draw_weights(np.full((1, 5000), t), np.log([[nu]]), random)[0]
    expected = stats.gamma((nu + 1) / 2, scale=2 / (nu + t**2))
    assert stats.kstest(weights, expected.cdf).pvalue > 0.001


def test_bad_lines_are_drawn_as_often_as_they_are_bad(random):
    errors = OutlierErrors()
    t = np.full((1, 20_000), 2.8)
    probability = errors.probability_bad(t, OUTLIER_THETA)[0, 0]
    good, bad = 0.97 * stats.norm.pdf(2.8), 0.03 * stats.norm.pdf(2.8, scale=8.0)
    assert probability == pytest.approx(bad / (good + bad), rel=1e-12)
    weights = errors.draw_weights(t, OUTLIER_THETA, random)
    assert set(np.unique(weights)) == {8.0**-2, 1.0} or np.allclose(np.unique(weights), [1 / 64, 1.0])
    # 3 standard errors of a fraction
    assert abs(np.mean(weights < 1) - probability) < 3 * np.sqrt(probability * (1 - probability) / 20_000)


def test_noise_factors_are_drawn_from_the_inverse_chi_square_law(random):
    law = InverseChiSquare(squares=np.array([50.0, 8.0]), degrees=np.array([40.0, 5.0]))
    drawn = law.draw(5000, random)
    for place in range(2):
        scaled = law.squares[place] * np.exp(-2 * drawn[:, place])
        assert stats.kstest(scaled, stats.chi2(law.degrees[place]).cdf).pvalue > 0.001


def test_hastings_ratio_is_that_of_the_density(random):
    """Density of ln f when S / f^2 follows a chi-square law: chi2.pdf(S/f^2) 2 S/f^2."""
    law = InverseChiSquare(squares=np.array([50.0, 8.0]), degrees=np.array([40.0, 5.0]))
    before = law.draw(6, random)
    after, ratio = law.propose(before, random)

    def log_density(log_factors):
        scaled = law.squares * np.exp(-2 * log_factors)
        return (stats.chi2.logpdf(scaled, law.degrees) + np.log(2 * scaled)).sum(axis=1)

    assert ratio == pytest.approx(log_density(before) - log_density(after), abs=1e-10)


def test_draws_outside_the_prior_stay_where_they_were(random):
    before = np.full((200, 1), 0.05)
    drawn = draw_log_factors(np.full((200, 1), 30.0), np.array([30]), before, np.array([-0.1, 0.1]), random)
    assert np.all(np.abs(drawn) <= 0.1) and np.any(drawn == 0.05) and np.any(drawn != 0.05)


def test_gram_algebra_agrees_with_least_squares(rng, random):
    rows, right = rng.standard_normal((30, 4)), rng.standard_normal(30)
    whole = quadratic.gram(rows, right)
    u = rng.standard_normal((3, 4))
    expected = [np.sum((right - rows @ item) ** 2) for item in u]
    assert quadratic.sum_of_squares(whole[None], u)[:, 0] == pytest.approx(expected, rel=1e-12)
    factors = quadratic.factorise(np.repeat(whole[None], 40_000, axis=0))
    q, r = np.linalg.qr(rows)
    best = np.linalg.solve(r, q.T @ right)
    rest = np.sum((right - rows @ best) ** 2)
    log_integral = -rest / 2 - np.log(np.abs(np.diag(r))).sum()
    assert quadratic.log_integral(factors[:1])[0] == pytest.approx(log_integral, rel=1e-12)
    whitened = (quadratic.draw(factors, random) - best) @ r.T
    # 4 standard errors: largest of 20 numbers
    assert np.abs(whitened.mean(axis=0)).max() < 4 / np.sqrt(40_000)
    assert np.abs(np.cov(whitened, rowvar=False) - np.eye(4)).max() < 4 * np.sqrt(2 / 40_000)
