"""Noise factors: closed forms, dense likelihoods, published numbers and simulation."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.linalg import null_space
from scipy.optimize import minimize
from scipy.stats import multivariate_normal

from dunhamfit.algebra.triangle import Triangle, covariance_factor, merge, reduce_rows, solve
from dunhamfit.algebra.variance import noise_factors, restricted_log_likelihood
from dunhamfit.errors import NotConverged, UsageError


def triangle_of(rows, positions, sigma, base) -> Triangle:
    sigma = np.broadcast_to(sigma, positions.shape)
    return reduce_rows(
        rows / sigma[:, None],
        (positions - rows @ base) / sigma,
        base,
        n=len(positions),
        log_sigma=float(np.log(sigma).sum()),
    )


def random_groups(rng, sizes, factors, *, parameters):
    """Rows, positions and stated sigma of each group; the noise is `factors` times sigma."""
    truth = rng.normal(size=parameters)
    groups = []
    for size, factor in zip(sizes, factors, strict=True):
        rows = rng.normal(size=(size, parameters))
        sigma = 10 ** rng.uniform(-1, 1, size)
        groups.append((rows, rows @ truth + factor * sigma * rng.normal(size=size), sigma))
    return groups, truth


def triangles_of(groups, base):
    return [triangle_of(*group, base) for group in groups]


def contrast_likelihood(groups):
    """Textbook REML as a function of the factors: dense density of contrasts that hold no parameter.

    It is divided by det(X'X)^1/2, which turns it into the likelihood of the module.

    D. A. Harville, Biometrika 61, 383 (1974), from memory.
    """
    rows = np.concatenate([group[0] for group in groups])
    positions = np.concatenate([group[1] for group in groups])
    contrasts, log_det = null_space(rows.T), np.linalg.slogdet(rows.T @ rows)[1]

    def likelihood(factors) -> float:
        sigma = np.concatenate([factor * group[2] for group, factor in zip(groups, factors, strict=True)])
        covariance = contrasts.T @ (sigma[:, None] ** 2 * contrasts)
        return multivariate_normal(cov=covariance).logpdf(contrasts.T @ positions) - log_det / 2

    return likelihood


def test_one_group_gives_chi2_over_degrees_of_freedom(rng):
    groups, truth = random_groups(rng, [12, 9, 14], [2.0, 2.0, 2.0], parameters=3)
    triangles = triangles_of(groups, truth)
    whole = merge(triangles)
    found = noise_factors(triangles, labels=[0, 0, 0])
    # The same expression in another order of operations: rounding only.
    assert_allclose(found.factors, [np.sqrt(whole.rss / (whole.n - 3))], rtol=1e-12)
    assert_allclose(found.degrees, [whole.n - 3], rtol=1e-12)
    # sigma(f)/f = 1/sqrt(2 dof): the large-sample rule of a standard deviation (common practice).
    assert_allclose(found.sigmas / found.factors, [1 / np.sqrt(2 * (whole.n - 3))], rtol=1e-9)


def test_restricted_likelihood_is_that_of_the_contrasts(rng):
    groups, truth = random_groups(rng, [8, 11], [1.0, 1.0], parameters=3)
    for factors in ([1.0, 1.0], [0.3, 5.0]):
        scaled = [item.scaled(factor) for item, factor in zip(triangles_of(groups, truth), factors, strict=True)]
        assert_allclose(restricted_log_likelihood(merge(scaled)), contrast_likelihood(groups)(factors), rtol=1e-10)


@pytest.mark.parametrize("seed", range(4))
def test_factors_are_those_of_a_dense_search(seed):
    rng = np.random.default_rng(seed)
    groups, truth = random_groups(rng, [15, 20, 25], [0.2, 1.0, 4.0], parameters=4)
    found = noise_factors(triangles_of(groups, truth))
    likelihood = contrast_likelihood(groups)
    search = minimize(
        lambda log_factors: -likelihood(np.exp(log_factors)),
        np.zeros(3),
        method="Nelder-Mead",
        options={"xatol": 1e-6, "fatol": 1e-10},
    )
    # A likelihood within 1e-10 of its maximum leaves the log factors free by some 3e-6.
    assert_allclose(np.log(found.factors), search.x, atol=1e-5)
    assert_allclose(found.log_restricted, -search.fun, rtol=1e-10)


def test_one_way_layout_agrees_with_analysis_of_variance():
    """Yield of dyestuff from 6 batches, 5 samples each.

    O. L. Davies and P. L. Goldsmith, Statistical Methods in Research and Production, 4th ed.
    (1972), from memory; variance within batches 2451.25, between batches 1764.05. Batch effects
    are parameters whose prior rows form a group of their own, so its factor is their spread.
    """
    yields = np.array([
        [1545, 1440, 1440, 1520, 1580], [1540, 1555, 1490, 1560, 1495], [1595, 1550, 1605, 1510, 1560],
        [1445, 1440, 1595, 1465, 1545], [1595, 1630, 1515, 1635, 1625], [1520, 1455, 1450, 1480, 1445],
    ], dtype=float)  # fmt: skip
    batches, samples = yields.shape
    base = np.array([1500.0, 0, 0, 0, 0, 0, 0])
    rows = np.column_stack([np.ones(yields.size), np.repeat(np.eye(batches), samples, axis=0)])
    within = triangle_of(rows, yields.ravel(), 50.0, base)
    between = triangle_of(np.eye(7)[1:], np.zeros(batches), 50.0, base)
    found = noise_factors([within, between], least_degrees=1)

    variances = (50.0 * found.factors) ** 2
    assert_allclose(variances, [2451.25, 1764.05], rtol=1e-8)
    # Mean squares are independent chi-squares, so var(MS) = 2 MS^2/dof (common practice).
    mean_squares, dof = np.array([2451.25, 11271.5]), np.array([24, 5])
    spread = 2 * mean_squares**2 / dof
    expected = np.sqrt([spread[0], spread.sum() / samples**2])
    assert_allclose(2 * variances * found.sigmas / found.factors, expected, rtol=1e-6)
    # In a balanced layout the grand mean does not depend on the factors: nothing to allow for.
    covariance = merge([within.scaled(found.factors[0]), between.scaled(found.factors[1])])
    grand_mean = np.sum(covariance_factor(covariance.r)[0] ** 2)
    assert_allclose(grand_mean, 11271.5 / yields.size, rtol=1e-8)
    assert abs(found.allowance[0, 0]) < 1e-10 * grand_mean


def test_allowance_agrees_with_meier_for_the_weighted_mean(rng):
    """P. Meier, Biometrics 9, 59 (1953), from memory: excess 4 sum h (1 - h)/dof, h the share of a group."""
    sizes = (300, 200)
    groups = [
        (np.ones((n, 1)), factor * rng.normal(size=n), np.ones(n)) for n, factor in zip(sizes, (1, 2), strict=True)
    ]
    found = noise_factors(triangles_of(groups, np.zeros(1)))
    weights = np.array(sizes) / found.factors**2
    shares = weights / weights.sum()
    excess = 4 * np.sum(shares * (1 - shares) / (np.array(sizes) - 1))
    # Both are the first order in 1/dof; the next order is some 1/200 of it, times a few.
    assert_allclose(found.allowance[0, 0] * weights.sum(), excess, rtol=0.03)


def test_scaling_relabelling_bases_and_sharing_change_nothing_else(rng):
    groups, truth = random_groups(rng, [20, 30, 25], [0.5, 1.0, 3.0], parameters=5)
    triangles = triangles_of(groups, truth)
    found = noise_factors(triangles)
    overstated = noise_factors([item.scaled(7.0) for item in triangles])
    assert_allclose(overstated.factors, found.factors / 7, rtol=1e-8)
    assert_allclose(overstated.sigmas, found.sigmas / 7, rtol=1e-7)
    assert_allclose(overstated.log_restricted, found.log_restricted, rtol=1e-10)

    order = [2, 0, 1]
    relabelled = noise_factors([triangles[i] for i in order])
    assert_allclose(relabelled.factors, found.factors[order], rtol=1e-8)
    assert_allclose(relabelled.information, found.information[np.ix_(order, order)], rtol=1e-6)
    moved = noise_factors([item.shifted(truth + step) for item, step in zip(triangles, (0.1, 0.2, 0.3), strict=True)])
    assert_allclose(moved.factors, found.factors, rtol=1e-8)

    shared = noise_factors(triangles, labels=[0, 1, 0])
    merged = noise_factors([merge([triangles[0], triangles[2]]), triangles[1]])
    assert_allclose(shared.factors, merged.factors, rtol=1e-8)


def test_fixed_rows_keep_their_uncertainty(rng):
    """A prior equals a group whose factor is held at 1 in the dense likelihood."""
    groups, truth = random_groups(rng, [18, 12], [2.0, 0.5], parameters=3)
    prior = (np.eye(3)[:2], truth[:2] + 0.05, np.array([0.1, 0.1]))
    found = noise_factors(triangles_of(groups, truth), fixed=[triangle_of(*prior, truth)])
    assert found.factors.shape == (2,)
    likelihood = contrast_likelihood([*groups, prior])
    search = minimize(
        lambda log_factors: -likelihood([*np.exp(log_factors), 1.0]),
        np.zeros(2),
        method="Nelder-Mead",
        options={"xatol": 1e-6, "fatol": 1e-10},
    )
    assert_allclose(np.log(found.factors), search.x, atol=1e-5)


def test_factors_far_apart_are_found_in_few_rounds(rng):
    factors = np.array([3e-4, 2.0, 1e-3, 0.1, 3e-4, 1.0])
    groups, truth = random_groups(rng, [40] * 6, factors, parameters=12)
    found = noise_factors(triangles_of(groups, truth))
    # 34 or more degrees of freedom each: ln f is uncertain by 0.12, and 4 of those are wide enough for six.
    assert np.all(np.abs(np.log(found.factors / factors)) < 4 * found.sigmas / found.factors)
    assert found.iterations < 20


def test_stated_uncertainties_of_factors_cover(rng):
    factors = np.array([0.5, 1.0, 3.0])
    scores = []
    for _ in range(300):
        groups, truth = random_groups(rng, [60, 80, 100], factors, parameters=8)
        found = noise_factors(triangles_of(groups, truth))
        scores.append(np.log(found.factors / factors) / (found.sigmas / found.factors))
    # 300 values a factor: the rms of a unit normal scatters by 0.04, its mean by 0.06.
    assert_allclose(np.sqrt(np.mean(np.square(scores), axis=0)), 1.0, atol=0.13)
    assert_allclose(np.mean(scores, axis=0), 0.0, atol=0.2)


def test_error_bars_with_the_allowance_cover(rng):
    """Twenty groups with little more lines than parameters: the plain covariance is too small."""
    plain, allowed = [], []
    for _ in range(100):
        groups, truth = random_groups(rng, [30] * 20, [1.0] * 20, parameters=20)
        triangles = triangles_of(groups, truth)
        found = noise_factors(triangles)
        whole = merge([item.scaled(factor) for item, factor in zip(triangles, found.factors, strict=True)])
        variance = np.sum(covariance_factor(whole.r) ** 2, axis=1)
        assert np.all(np.linalg.eigvalsh(found.allowance) > -1e-12 * variance.max())
        plain.append((solve(whole) - truth) / np.sqrt(variance))
        allowed.append((solve(whole) - truth) / np.sqrt(variance + np.diag(found.allowance)))
    # 2000 values: the rms of a unit normal scatters by 0.016.
    assert np.sqrt(np.mean(np.square(plain))) > 1.04
    assert_allclose(np.sqrt(np.mean(np.square(allowed))), 1.0, atol=0.05)


def test_a_group_that_one_parameter_absorbs_is_not_determined(rng):
    groups, truth = random_groups(rng, [40, 30], [1.0, 2.0], parameters=3)
    groups = [(np.column_stack([rows, np.zeros(len(rows))]), *rest) for rows, *rest in groups]
    alone = (np.array([[0.3, 0.1, 0.0, 1.0]]), np.array([5.0]), np.array([1.0]))
    found = noise_factors(triangles_of([*groups, alone], np.array([*truth, 0.0])))
    assert found.determined.tolist() == [True, True, False]
    assert found.factors[2] == 1 and np.isnan(found.sigmas[2]) and found.degrees[2] == pytest.approx(0, abs=1e-9)
    without = noise_factors(triangles_of([(rows[:, :3], *rest) for rows, *rest in groups], truth))
    assert_allclose(found.factors[:2], without.factors, rtol=1e-8)


def test_small_groups_keep_the_factor_one(rng):
    groups, truth = random_groups(rng, [40, 3], [2.0, 0.01], parameters=4)
    found = noise_factors(triangles_of(groups, truth))
    assert found.determined.tolist() == [True, False]
    assert found.factors[1] == 1
    assert noise_factors(triangles_of(groups, truth), least_degrees=0.5).determined[0]


def test_vanishing_residuals_are_not_taken_for_small_noise(rng):
    groups, truth = random_groups(rng, [20, 30], [0.0, 1.0], parameters=3)
    found = noise_factors(triangles_of(groups, truth))
    assert found.determined.tolist() == [False, True]
    assert found.factors[0] == 1
    exact = noise_factors(triangles_of(groups[:1], truth))
    assert not exact.determined[0] and exact.factors[0] == 1
    assert np.all(exact.allowance == 0)


def test_groups_that_cannot_be_told_apart_are_not_determined(rng):
    """Each line of one group shares a parameter with one line of the other and with nothing else."""
    positions = rng.normal(size=(2, 20))
    groups = [(np.eye(20), positions[i], np.ones(20)) for i in range(2)]
    found = noise_factors(triangles_of(groups, np.zeros(20)))
    assert not np.any(found.determined)
    assert np.all(found.factors == 1)


@pytest.mark.parametrize("seed", range(20))
def test_groups_of_hardly_any_lines_neither_diverge_nor_collapse(seed):
    rng = np.random.default_rng(seed)
    groups, truth = random_groups(rng, [2, 2, 2, 3, 3, 4, 4, 5, 6], [1.0] * 9, parameters=3)
    for least in (1.0, 4.0):
        found = noise_factors(triangles_of(groups, truth), least_degrees=least)
        assert np.all(found.factors > 1e-4) and np.all(found.factors < 1e2)
        assert np.all(found.degrees[found.determined] >= least)


def test_unsettled_search_says_where_it_stopped(rng):
    groups, truth = random_groups(rng, [20, 30], [1e-3, 2.0], parameters=3)
    with pytest.raises(NotConverged, match="not settled after 3 rounds") as caught:
        noise_factors(triangles_of(groups, truth), max_rounds=3)
    assert set(caught.value.state) == {"factors", "degrees", "log_restricted", "largest_step"}
    assert caught.value.state["factors"].shape == (2,)


@pytest.mark.parametrize("labels", [[0, 2], [1, 2], [0], [-1, 0]])
def test_labels_must_number_the_factors(rng, labels):
    groups, truth = random_groups(rng, [9, 9], [1.0, 1.0], parameters=2)
    with pytest.raises(UsageError, match="labels must number the factors of the 2 triangles"):
        noise_factors(triangles_of(groups, truth), labels=labels)


def read_carbon_monoxide(path):
    """12C16O lines up to v' = 5: positions, uncertainties, (v', J'), (v'', J'').

    160-character records of HITRAN2016 (I. E. Gordon et al., J. Quant. Spectrosc. Radiat. Transf.
    203, 3 (2017)); the uncertainty is the upper end of the decade that the code stands for.
    """
    found = []
    for record in path.read_text().splitlines():
        upper, lower = int(record[67:82]), int(record[82:97])
        if record[:3] == " 51" and upper <= 5:
            branch, j = record[112:127].split()[0], int(record[112:127].split()[1])
            change = {"R": 1, "P": -1}[branch]
            found.append((float(record[3:15]), 10.0 ** (1 - int(record[127])), upper, j + change, lower, j))
    return np.array(found)


def test_carbon_monoxide_band_by_band(shared_reference):
    """Published constants: T. George et al., J. Mol. Spectrosc. 165, 500 (1994), from memory."""
    lines = read_carbon_monoxide(shared_reference / "co_hitran2016_6iso.par")
    orders = [(k, l) for l, highest in enumerate([5, 4, 3, 2, 1]) for k in range(highest + 1) if (k, l) != (0, 0)]

    def monomials(v, j):
        return np.stack([(v + 0.5) ** k * (j * (j + 1)) ** l for k, l in orders], axis=1)

    positions, sigma = lines[:, 0], lines[:, 1]
    rows = monomials(lines[:, 2], lines[:, 3]) - monomials(lines[:, 4], lines[:, 5])
    base = solve(triangle_of(rows, positions, sigma, np.zeros(len(orders))))
    bands = [tuple(band) for band in lines[:, [2, 4]].astype(int)]
    triangles = []
    for band in sorted(set(bands)):
        inside = np.array([item == band for item in bands])
        triangles.append(triangle_of(rows[inside], positions[inside], sigma[inside], base))

    found = noise_factors(triangles)
    assert np.all(found.determined) and found.iterations < 20
    whole = merge([item.scaled(factor) for item, factor in zip(triangles, found.factors, strict=True)])
    constants = dict(zip(orders, solve(whole), strict=True))
    # The list is largely calculated and differs from the measurements behind the published
    # constants by up to 1e-5 cm-1, which these tolerances reflect.
    assert constants[1, 0] == pytest.approx(2169.8127218, abs=2e-5)
    assert constants[2, 0] == pytest.approx(-13.2879157, abs=3e-5)
    assert constants[0, 1] == pytest.approx(1.9312809029, abs=2e-8)
    assert constants[1, 1] == pytest.approx(-0.017504193, abs=6e-8)
