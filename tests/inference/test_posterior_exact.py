"""Sampled posteriors against posteriors that are known: formulas, and sums over a fine grid.

The grids use densities of scipy.stats and least squares of numpy on a design that is written out here
(J. L. Dunham, Phys. Rev. 41, 721 (1932)), nothing of dunhamfit. Tolerances are 3 Monte Carlo standard errors
as the posterior states them; of a standard deviation it is sd/sqrt(2 ess), valid for near-Gaussian
shapes. With some forty comparisons one seed in ten would fail one of them by chance; the seeds are fixed.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats
from scipy.special import gammaln
from simulated_campaign import FACTOR_RANGE, OFFSET_SIGMA, SIGMA, TERMS, TRUTH, noiseless, shifted

from dunhamfit.fit.model import Prior
from dunhamfit.fit.solve import fit_lines
from dunhamfit.inference.sampling import sample
from dunhamfit.lines.line_list import LineList, Source

NAMES = ("Y10", "Y20", "Y01", "Y11")


def design(lines: LineList) -> np.ndarray:
    """Derivative of each position with respect to Y10, Y20, Y01, Y11, over sigma."""

    def level(v, j):
        x, y = v + 0.5, j * (j + 1.0)
        return np.column_stack([x, x**2, y, x * y])

    return (level(lines.v_upper, lines.j_upper) - level(lines.v_lower, lines.j_lower)) / SIGMA


def without_offset(lines: LineList) -> LineList:
    columns = {name: getattr(lines, name) for name in lines.__dataclass_fields__}
    return LineList(**(columns | {"sources": (Source("oven"), Source("jet"))}))


def agree(posterior, name: str, mean: float, sd: float) -> None:
    """The draws have this mean and sd within 3 Monte Carlo standard errors."""
    row = posterior.summary()[posterior.index(name)]
    assert abs(row.mean - mean) < 3 * row.mcse, f"{name}: mean {row.mean} against {mean}"
    assert abs(row.sd - sd) < 3 * row.sd / np.sqrt(2 * row.ess), f"{name}: sd {row.sd} against {sd}"


def moments(grid: np.ndarray, weights: np.ndarray) -> tuple[float, float]:
    mean = np.sum(weights * grid)
    return float(mean), float(np.sqrt(np.sum(weights * (grid - mean) ** 2)))


def normalised(log_weights: np.ndarray) -> np.ndarray:
    weights = np.exp(log_weights - log_weights.max())
    return weights / weights.sum()


def test_common_factor_gives_student_law():
    """With one factor for all lines the constants follow a multivariate Student law with n - p degrees of
    freedom and S / f^2 a chi-square law with as many (A. Gelman et al., Bayesian Data Analysis, 3rd ed.,
    section 14.2, from memory)."""
    lines = without_offset(noiseless())
    noise = 1.7 * SIGMA * np.random.default_rng(11).standard_normal(len(lines))
    fit = fit_lines(shifted(lines, noise), TERMS, reference="28Si32S", policy="common")
    posterior = sample(fit, seed=4)
    a = design(lines)
    q, r = np.linalg.qr(a)
    step = np.linalg.solve(r, q.T @ (noise / SIGMA))
    square = float(np.sum((noise / SIGMA - a @ step) ** 2))
    degrees = len(lines) - len(NAMES)
    root = np.linalg.solve(r, np.eye(4)) * np.sqrt(square / degrees)
    scale = root @ root.T
    variances = np.diag(scale) * degrees / (degrees - 2)
    for place, name in enumerate(NAMES):
        agree(posterior, name, TRUTH[name] + step[place], np.sqrt(variances[place]))
    mean = np.exp(0.5 * np.log(square / 2) + gammaln((degrees - 1) / 2) - gammaln(degrees / 2))
    agree(posterior, "factor[all lines]", mean, np.sqrt(square / (degrees - 2) - mean**2))
    whitened = np.linalg.solve(root, posterior.covariance(NAMES)) @ np.linalg.solve(root, np.eye(4)).T
    ess = posterior.diagnostics.ess[:4].min()
    expected = degrees / (degrees - 2)
    # Variance of a sample covariance, 2 or 1 over N, for a Student law near the Gaussian.
    assert np.abs(whitened - expected * np.eye(4)).max() < 3 * expected * np.sqrt(2 / ess)


def test_two_factors_with_an_offset_against_a_grid():
    lines = noiseless()
    rng = np.random.default_rng(12)
    noise = np.array([0.8, 1.6])[lines.source] * SIGMA * rng.standard_normal(len(lines)) + 1e-4 * (lines.source == 0)
    fit = fit_lines(shifted(lines, noise), TERMS, reference="28Si32S", policy="per-source")
    posterior = sample(fit, seed=4, factor_range=FACTOR_RANGE)
    rows = np.column_stack([design(lines), (lines.source == 0) / SIGMA])
    prior = np.array([[0.0, 0.0, 0.0, 0.0, 1 / OFFSET_SIGMA]])
    grid = np.linspace(*np.log(FACTOR_RANGE), 90)
    log_weights = np.empty((90, 90))
    means, variances = np.empty((2, 90, 90, 5))
    for i, first in enumerate(grid):
        for j, second in enumerate(grid):
            weight = np.exp(-np.array([first, second]))[lines.source]
            q, r = np.linalg.qr(np.vstack([rows * weight[:, None], prior]))
            right = np.append(noise / SIGMA * weight, 0.0)
            means[i, j] = np.linalg.solve(r, q.T @ right)
            variances[i, j] = np.sum(np.linalg.solve(r, np.eye(5)) ** 2, axis=1)
            rest = right @ right - np.sum((q.T @ right) ** 2)
            log_weights[i, j] = np.sum(np.log(weight)) - rest / 2 - np.sum(np.log(np.abs(np.diag(r))))
    weights = normalised(log_weights)
    first, second = np.meshgrid(np.exp(grid), np.exp(grid), indexing="ij")
    agree(posterior, "factor[oven]", *moments(first, weights))
    agree(posterior, "factor[jet]", *moments(second, weights))
    for place, name in enumerate((*NAMES, "offset[oven]")):
        mean, between = moments(means[..., place], weights)
        sd = np.sqrt(between**2 + np.sum(weights * variances[..., place]))
        agree(posterior, name, TRUTH.get(name, 0.0) + mean, sd)


@pytest.fixture
def one_constant():
    """Fit of Y10 alone, the noise of its lines, and the design of Y10: few enough numbers for a grid."""

    def make(noise: np.ndarray, policy: str):
        lines = without_offset(noiseless())
        fixed = {name: Prior(TRUTH[name], 0.0) for name in ("Y20", "Y01", "Y11")}
        fit = fit_lines(
            shifted(lines, SIGMA * noise), TERMS, reference="28Si32S", policy=policy, priors=fixed
        )
        return fit, design(lines)[:, 0]

    return make


def y10_grid(fit, column, points: int) -> np.ndarray:
    """Y10 less its true value over some six of its sigmas on either side."""
    sigma = 1 / np.sqrt(np.sum(column**2))
    centre = fit.value(1, 0) - TRUTH["Y10"]
    return centre + sigma * np.linspace(-8, 8, points)


def test_student_errors_against_a_grid(one_constant):
    count = len(noiseless())
    noise = 1.3 * np.random.default_rng(13).standard_t(3.0, count)
    fit, column = one_constant(noise, "common")
    posterior = sample(fit, seed=4, model="student", factor_range=FACTOR_RANGE)
    y10 = y10_grid(fit, column, 61)[:, None, None]
    log_factor = np.linspace(*np.log(FACTOR_RANGE), 40)[None, :, None]
    log_wing = np.linspace(0.0, np.log(300.0), 50)[None, None, :]
    wing = np.exp(log_wing)
    # Prior of the wing parameter on the scale of its logarithm: Gamma(2, rate 0.1).
    log_weights = stats.gamma.logpdf(wing, 2, scale=10) + log_wing + 0 * y10 + 0 * log_factor
    for value, slope in zip(noise, column, strict=True):
        log_weights = log_weights + stats.t.logpdf((value - slope * y10) * np.exp(-log_factor), wing) - log_factor
    weights = normalised(log_weights)
    agree(posterior, "Y10", *moments(TRUTH["Y10"] + y10, weights))
    agree(posterior, "factor[all lines]", *moments(np.exp(log_factor), weights))
    mean, _ = moments(wing, weights)  # its law is far from a Gaussian: the mean only
    row = posterior.summary()[posterior.index("wing")]
    assert abs(row.mean - mean) < 3 * row.mcse


def test_outliers_against_a_grid(one_constant):
    rng = np.random.default_rng(14)
    count = len(noiseless())
    bad = rng.random(count) < 0.08
    noise = np.where(bad, 12.0, 1.0) * rng.standard_normal(count)
    fit, column = one_constant(noise, "stated")
    posterior = sample(fit, seed=4, model="outliers")
    y10 = y10_grid(fit, column, 81)[:, None, None]
    fraction_logit = np.linspace(-9, 2, 45)[None, :, None]
    fraction = 1 / (1 + np.exp(-fraction_logit))
    log_width = np.linspace(*np.log([3.0, 1000.0]), 50)[None, None, :]
    log_weights = stats.beta.logpdf(fraction, 1, 19) + np.log(fraction * (1 - fraction)) + 0 * y10 + 0 * log_width
    parts = []
    for value, slope in zip(noise, column, strict=True):
        t = value - slope * y10
        good = (1 - fraction) * stats.norm.pdf(t)
        wide = fraction * stats.norm.pdf(t, scale=np.exp(log_width))
        parts.append(wide / (good + wide))
        log_weights = log_weights + np.log(good + wide)
    weights = normalised(log_weights)
    agree(posterior, "Y10", *moments(TRUTH["Y10"] + y10, weights))
    row = posterior.summary()[posterior.index("bad_fraction")]
    assert abs(row.mean - moments(fraction, weights)[0]) < 3 * row.mcse
    expected = np.array([np.sum(weights * part) for part in parts])
    # 2000 draws of a probability, some of them alike: its standard error is below 0.5 / sqrt(500).
    assert np.abs(posterior.bad_probability - expected).max() < 3 * 0.5 / np.sqrt(500)
    assert np.all(posterior.bad_probability[np.abs(noise) > 8] > 0.99)


def test_a_factor_that_is_held_stays_out_of_the_posterior():
    """A source with two lines cannot tell its noise factor; the posterior takes it as 1 and says so."""
    lines = noiseless()
    few = np.flatnonzero(lines.source == 1)[2:]
    rng = np.random.default_rng(15)
    lines = shifted(lines, SIGMA * rng.standard_normal(len(lines))).excluded(np.isin(np.arange(len(lines)), few), "few")
    fit = fit_lines(lines, TERMS, reference="28Si32S", policy="per-source")
    posterior = sample(fit, seed=4, total=640)
    assert "factor[oven]" in posterior.names and "factor[jet]" not in posterior.names
    assert any("too few lines to tell it: jet" in note for note in posterior.notes)
