"""Statistics against scipy.stats, printed tables and explicit refits."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy import stats

from dunhamfit.algebra import criteria
from dunhamfit.errors import UsageError

# JCGM 100:2008 (GUM), table G.2: degrees of freedom, then t for the fractions in the heading.
FRACTIONS = (0.6827, 0.90, 0.95, 0.9545, 0.99, 0.9973)
TABLE_G2 = {
    1: (1.84, 6.31, 12.71, 13.97, 63.66, 235.80),
    2: (1.32, 2.92, 4.30, 4.53, 9.92, 19.21),
    5: (1.11, 2.02, 2.57, 2.65, 4.03, 5.51),
    10: (1.05, 1.81, 2.23, 2.28, 3.17, 3.96),
    20: (1.03, 1.72, 2.09, 2.13, 2.85, 3.42),
    float("inf"): (1.000, 1.645, 1.960, 2.000, 2.576, 3.000),
}


@pytest.mark.parametrize("dof", TABLE_G2)
def test_coverage_factors_are_those_of_the_guide(dof):
    # Half a unit of the last printed digit; the fractions 68.27, 95.45 and 99.73 % are themselves
    # rounded, which moves the long tail of one degree of freedom by up to 0.02 %.
    for level, printed in zip(FRACTIONS, TABLE_G2[dof], strict=True):
        rounding = 0.0005 if np.isinf(dof) else 0.005
        assert criteria.coverage_factor(level, dof) == pytest.approx(printed, abs=rounding, rel=2e-4)


def test_coverage_factor_refuses_what_is_no_level():
    with pytest.raises(UsageError, match=r"between 0 and 1 \(got 95\)"):
        criteria.coverage_factor(95)
    with pytest.raises(UsageError, match=r"must be positive \(got 0\)"):
        criteria.coverage_factor(0.95, 0)


def test_log_likelihood_is_the_sum_of_densities(rng):
    sigma, residual = rng.uniform(0.1, 2.0, 30), rng.normal(size=30)
    expected = stats.norm(scale=sigma).logpdf(residual).sum()
    found = criteria.log_likelihood(float(np.sum((residual / sigma) ** 2)), 30, float(np.log(sigma).sum()))
    assert found == pytest.approx(expected, rel=1e-12)


def test_information_criteria():
    """By hand, from the definitions of Hurvich and Tsai (1989) and of Schwarz (1978)."""
    assert criteria.aicc(-10.0, 20, 3) == pytest.approx(20 + 6 + 24 / 16)
    assert criteria.bic(-10.0, 20, 3) == pytest.approx(20 + 3 * np.log(20))
    assert criteria.aicc(-10.0, 10**9, 3) == pytest.approx(26, abs=1e-6)
    assert criteria.aicc(-10.0, 4, 3) == np.inf


def test_reduced_chi2_without_degrees_of_freedom():
    assert criteria.reduced_chi2(12.0, 8) == 1.5
    assert np.isnan(criteria.reduced_chi2(0.0, 0))


def test_tails_agree_with_scipy_stats():
    chi2, dof = np.array([0.0, 3.84, 200.0]), np.array([1, 1, 100])
    assert_allclose(criteria.chi2_tail(chi2, dof), stats.chi2(dof).sf(chi2), rtol=1e-10)
    # The printed 5 % point; half a unit of its last digit times the density there is 1.5e-5.
    assert criteria.chi2_tail(3.841, 1) == pytest.approx(0.05, abs=2e-5)
    t = np.array([-12.0, -1.0, 0.0, 2.5])
    assert_allclose(criteria.two_sided_tail(t, 7), 2 * stats.t(7).sf(np.abs(t)), rtol=1e-10)
    assert_allclose(criteria.two_sided_tail(t), 2 * stats.norm.sf(np.abs(t)), rtol=1e-10)


def least_squares(rows, values):
    """Coefficients, residuals, covariance for unit variance, degrees of freedom: dense."""
    coefficients, *_ = np.linalg.lstsq(rows, values)
    return coefficients, values - rows @ coefficients, np.linalg.inv(rows.T @ rows), len(rows) - rows.shape[1]


def test_studentised_residual_is_the_t_value_of_an_offset_for_that_line(rng):
    rows, values = rng.normal(size=(15, 3)), rng.normal(size=15)
    _, residual, covariance, dof = least_squares(rows, values)
    leverage = np.einsum("ij,jk,ik->i", rows, covariance, rows)
    found = criteria.studentised(residual, leverage, s2=residual @ residual / dof, dof=dof)
    for line in range(15):
        wider = np.column_stack([rows, np.eye(15)[line]])
        coefficients, left, spread, fewer = least_squares(wider, values)
        expected = coefficients[-1] / np.sqrt(spread[-1, -1] * (left @ left) / fewer)
        assert found[line] == pytest.approx(expected, rel=1e-9)


def test_studentised_follows_students_distribution(rng):
    rows = rng.normal(size=(8, 3))
    hat = rows @ np.linalg.inv(rows.T @ rows) @ rows.T
    found = []
    for _ in range(2000):
        residual = (np.eye(8) - hat) @ rng.normal(size=8)
        found.append(criteria.studentised(residual, np.diag(hat), s2=residual @ residual / 5, dof=5)[0])
    assert stats.kstest(found, stats.t(4).cdf).pvalue > 0.01


def test_studentised_gives_no_number_where_nothing_is_left():
    residual, leverage = np.array([0.0, 1.0]), np.array([1.0, 0.5])
    assert_allclose(criteria.studentised(residual, leverage, s2=4.0, dof=np.inf), [np.nan, 1 / np.sqrt(2)])
    assert np.all(np.isnan(criteria.studentised(residual, leverage, s2=2.0, dof=1)))
    assert np.all(np.isnan(criteria.studentised(np.zeros(2), leverage, s2=0.0, dof=5)))


def test_holm_on_a_published_list_of_tests():
    """Fifteen p values of Y. Benjamini and Y. Hochberg, J. R. Stat. Soc. B 57, 289 (1995), from memory.

    Holding the chance of any false alarm at 5 % they reject three.
    """
    p = np.array([
        0.0001, 0.0004, 0.0019, 0.0095, 0.0201, 0.0278, 0.0298, 0.0344,
        0.0459, 0.3240, 0.4262, 0.5719, 0.6528, 0.7590, 1.0000,
    ])  # fmt: skip
    adjusted = criteria.holm(p)
    assert np.sum(adjusted < 0.05) == 3
    # By hand from S. Holm, Scand. J. Stat. 6, 65 (1979).
    assert_allclose(adjusted[:4], [0.0015, 0.0056, 0.0247, 0.114])
    order = np.array([3, 14, 0, 7, 1, 2, 9, 4, 13, 5, 12, 6, 11, 8, 10])
    assert_allclose(criteria.holm(p[order]), adjusted[order])
    assert criteria.holm([]).shape == (0,)


def test_holm_holds_the_chance_of_any_false_alarm(rng):
    """Twelve dependent tests without an effect, 4000 times: 5 % at the most, give or take 0.35 %."""
    shared = rng.normal(size=(4000, 1))
    p = criteria.two_sided_tail(np.sqrt(0.3) * shared + np.sqrt(0.7) * rng.normal(size=(4000, 12)))
    alarms = [np.any(criteria.holm(row) < 0.05) for row in p]
    assert 0.03 < np.mean(alarms) < 0.061
