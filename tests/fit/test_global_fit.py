"""Properties of the global fit: what must not change it, and two routes to one answer."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from mpmath import mp
from reference.exact_solution import least_squares
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

from dunhamfit.algebra.triangle import covariance_factor, merge, solve
from dunhamfit.fit.model import Prior
from dunhamfit.fit.noise import POLICIES
from dunhamfit.fit.solve import fit_lines, make_model
from dunhamfit.lines.line_list import LineList, Source
from dunhamfit.lines.line_list import merge as merge_lines
from dunhamfit.molecule.terms import TermSet

# Two routes that differ in rounding only: what the project promises, in units of sigma and as a part of sigma.
EQUAL = 1e-10
seeds = st.integers(0, 2**32)
few = settings(max_examples=10, deadline=None)


def fitted(lines: LineList, **options):
    return fit_lines(lines, TERMS, reference=REFERENCE, breakdown=BREAKDOWN, **options)


def assert_same(one, other, within=1e-8):
    """Positions of some 1e3 cm-1 to 1e-6 leave rounding of 1e-7 sigma in the constants of very precise lines."""
    assert np.abs((one.values - other.values) / other.sigmas).max() < within
    np.testing.assert_allclose(one.sigmas, other.sigmas, rtol=1e-9)
    assert one.statistics.chi2 == pytest.approx(other.statistics.chi2, rel=1e-9)


def test_noiseless_lines_return_the_truth():
    fit = fitted(campaign())
    # The simulated positions are rounded to 2e-13 cm-1, 1e-7 of the smallest sigma.
    for (k, l), value in TRUTH.items():
        assert abs(fit.value(k, l) - value) < 1e-6 * fit.sigma(k, l)
    for (atom, k, l), value in BREAKDOWN_TRUTH.items():
        assert abs(fit.value(k, l, atom) - value) < 1e-6 * fit.sigma(k, l, atom)
    assert np.abs(fit.residuals).max() < 1e-12


@few
@given(seeds)
def test_the_order_of_lines_does_not_matter(seed):
    lines = noisy(campaign(), seed)
    order = np.random.default_rng(seed).permutation(len(lines))
    one, other = fitted(lines), fitted(reordered(lines, order))
    assert_same(one, other)
    np.testing.assert_allclose(other.residuals, one.residuals[order], atol=1e-12)


@few
@given(seeds)
def test_codes_and_names_of_isotopologues_and_sources_do_not_matter(seed):
    lines = noisy(campaign(), seed)
    rng = np.random.default_rng(seed)
    new_code, new_source = rng.permutation(3), rng.permutation(2)
    back, back_source = np.argsort(new_code), np.argsort(new_source)
    relabelled = with_columns(
        lines,
        isotopologue=new_code[lines.isotopologue],
        isotopologues=tuple(lines.isotopologues[i] for i in back),
        source=new_source[lines.source],
        sources=tuple(replace(lines.sources[i], name=f"another {i}") for i in back_source),
    )
    assert_same(fitted(relabelled), fitted(lines))
    assert_same(fitted(relabelled, policy="per-band"), fitted(lines, policy="per-band"), within=1e-6)


def test_bands_of_one_list_or_of_many_are_the_same():
    lines = noisy(campaign(), 5)
    pieces = [lines.subset(np.flatnonzero(lines.v_upper == v)) for v in (2, 0, 1)]
    assert_same(fitted(merge_lines(pieces)), fitted(lines))


@few
@given(seeds, st.integers(2, 5))
def test_a_repeated_line_is_one_line_with_a_smaller_sigma(seed, times):
    lines = noisy(campaign(), seed)
    repeated = reordered(lines, np.repeat(np.arange(len(lines)), times))
    once = with_columns(lines, sigma=lines.sigma / np.sqrt(times))
    assert_same(fitted(repeated), fitted(once))
    assert fitted(repeated).statistics.lines == times * len(lines)


@few
@given(seeds)
def test_repeats_that_differ_pool_to_what_every_line_says(seed):
    """Pooling keeps the sum of squares within repeats: chi2 is that of all residuals."""
    rng = np.random.default_rng(seed)
    lines = reordered(campaign(), np.repeat(np.arange(len(campaign())), 3))
    lines = with_columns(lines, sigma=lines.sigma * rng.uniform(0.5, 2, len(lines)))
    lines = with_columns(lines, position=lines.position + rng.normal(0, lines.sigma))
    fit = fitted(lines)
    assert fit.statistics.chi2 == pytest.approx(np.sum((fit.residuals / lines.sigma) ** 2), rel=1e-9)
    # Where every line is a source of its own, nothing pools.
    each = tuple(Source(f"{i}") for i in range(len(lines)))
    direct = fitted(with_columns(lines, source=np.arange(len(lines)), sources=each))
    assert_same(fit, direct)


def test_stated_uncertainties_ten_times_larger_make_sigma_ten_times_larger_unless_the_scatter_decides():
    lines = noisy(campaign(), 3)
    wider = with_columns(lines, sigma=10 * lines.sigma)
    one = fitted(lines)
    np.testing.assert_allclose(fitted(wider).sigmas, 10 * one.sigmas, rtol=1e-9)
    for policy in POLICIES[1:]:
        scaled, plain = fitted(wider, policy=policy), fitted(lines, policy=policy)
        np.testing.assert_allclose(scaled.sigmas, plain.sigmas, rtol=1e-6)
        np.testing.assert_allclose(scaled.noise.factors, plain.noise.factors / 10, rtol=1e-6)
    assert fitted(wider).noise.policy == "stated"


def test_excluded_lines_do_not_count():
    lines = noisy(campaign(), 4)
    mask = np.arange(len(lines)) % 5 == 0
    excluded = with_columns(lines, position=lines.position + np.where(mask, 1e3, 0.0)).excluded(mask, "test")
    assert_same(fitted(excluded), fitted(lines.subset(~mask)))


def exact_rows(lines: LineList, model):
    """Design rows and observations of the reference isotopologue as rational numbers, calibration columns last."""

    def level(v, j, item):
        return Fraction(2 * int(v) + 1, 2) ** item.k * Fraction(int(j) * (int(j) + 1)) ** item.l

    rows = []
    for i in range(len(lines)):
        row = [
            level(lines.v_upper[i], lines.j_upper[i], c) - level(lines.v_lower[i], lines.j_lower[i], c)
            for c in model.constants
        ]
        for item in model.parameters[len(model.constants) :]:
            mine = lines.sources[lines.source[i]].name == item.source
            row.append(
                Fraction(float(lines.position[i])) if mine and item.kind == "scale" else Fraction(int(mine))
            )
        rows.append(row)
    return rows, [Fraction(x) for x in lines.position.tolist()]


def assert_solution(fit, values, covariance, count):
    sigmas = [mp.sqrt(covariance[i, i]) for i in range(count)]
    for i in range(count):
        value = float(fit.values[i])
        # No closer than float64 can say the value: its last place is 1e-9 sigma here and there.
        assert abs(float(mp.mpf(value) - values[i])) <= EQUAL * float(sigmas[i]) + np.spacing(abs(value))
    np.testing.assert_allclose(fit.sigmas[:count], [float(s) for s in sigmas], rtol=EQUAL)
    correlation = [
        [float(covariance[i, j] / (sigmas[i] * sigmas[j])) for j in range(count)] for i in range(count)
    ]
    size = np.outer(fit.sigmas[:count], fit.sigmas[:count])
    np.testing.assert_allclose(fit.parameter_covariance[:count, :count] / size, correlation, atol=EQUAL)


def calibrated_lists() -> LineList:
    return noisy(
        merge_lines(
            [
                band("1-0", source=Source("grating", offset=2e-4, scale=3e-7), j_max=6),
                band("2-1", source=Source("grating", offset=2e-4, scale=3e-7), j_max=4),
                band("2-0", source=Source("diode", scale=1e-7), j_max=6),
            ]
        ),
        8,
    )


def test_shared_offset_and_scale_equal_a_dense_covariance():
    """Generalised least squares with the covariance that a shared error makes: A. C. Aitken, Proc. R. Soc.
    Edinburgh 55, 42 (1935), from memory. Solved in 80 digits."""
    lines = calibrated_lists()
    fit = fit_lines(lines, TERMS, reference=REFERENCE)
    count = len(fit.constants)
    matrix, observed = exact_rows(lines, make_model(lines, TERMS, reference=REFERENCE))
    with mp.workdps(80):
        covariance = mp.matrix(len(lines))
        for i in range(len(lines)):
            covariance[i, i] += mp.mpf(float(lines.sigma[i])) ** 2
            for j in range(len(lines)):
                for column, item in enumerate(fit.model.parameters[count:], start=count):
                    source = next(s for s in lines.sources if s.name == item.source)
                    shared = mp.mpf(getattr(source, item.kind)) ** 2
                    covariance[i, j] += shared * _mpf(matrix[i][column]) * _mpf(matrix[j][column])
        inverse = covariance**-1
        design = mp.matrix([[_mpf(x) for x in row[:count]] for row in matrix])
        found = (design.T * inverse * design) ** -1
        values = found * (design.T * inverse * mp.matrix([_mpf(x) for x in observed]))
        assert_solution(fit, values, found, count)


def _mpf(value: Fraction):
    return mp.mpf(value.numerator) / value.denominator


def test_a_free_offset_is_a_column_of_its_own():
    lines = calibrated_lists()
    free = (
        tuple(replace(source, offset=np.inf, scale=None) for source in lines.sources[:1]) + lines.sources[1:]
    )
    lines = with_columns(lines, sources=free)
    fit = fit_lines(lines, TERMS, reference=REFERENCE)
    matrix, observed = exact_rows(lines, fit.model)
    sigma = [*lines.sigma.tolist(), 1e-7]
    scale_row = [Fraction(0)] * len(TERMS) + [Fraction(0), Fraction(1)]
    values, covariance = least_squares([*matrix, scale_row], [*observed, Fraction(0)], sigma)
    assert fit.model.names[-2:] == ("offset[grating]", "scale[diode]")
    with mp.workdps(80):
        assert_solution(fit, values, covariance, len(fit.values))


def test_a_prior_is_an_observation_of_the_constant():
    lines = noisy(band("1-0", j_max=8), 1)
    terms = [(1, 0), (0, 1), (1, 1), (0, 2)]
    prior = Prior(-1.6e-3, 2e-6, "an earlier fit")
    fit = fit_lines(lines, TermSet(terms), reference=REFERENCE, priors={"Y11": prior})
    matrix, observed = exact_rows(lines, fit.model)
    values, covariance = least_squares(
        [*matrix, [Fraction(int(c.name == "Y11")) for c in fit.constants]],
        [*observed, Fraction(prior.value)],
        [*lines.sigma.tolist(), prior.sigma],
    )
    with mp.workdps(80):
        assert_solution(fit, values, covariance, len(terms))


def test_a_fixed_constant_is_eliminated():
    lines = noisy(campaign(), 2)
    fit = fitted(lines, priors={"Y12": Prior(-5e-10, 0.0)})
    assert fit.value(1, 2) == -5e-10
    assert fit.sigma(1, 2) == 0.0
    # The same lines with what the fixed term contributes taken away, fitted without it.
    without = [key for key in TRUTH if key != (1, 2)]
    contribution = np.concatenate(
        [
            band(
                f"{part.v_upper[0]}-{part.v_lower[0]}",
                isotopologue=part.isotopologues[part.isotopologue[0]],
                j_max=int(part.j_lower.max()),
                truth={(1, 2): -5e-10},
                breakdown={},
            ).position
            for part in _by_band(lines)
        ]
    )
    moved = with_columns(lines, position=lines.position - contribution)
    other = fit_lines(moved, TermSet(without), reference=REFERENCE, breakdown=BREAKDOWN)
    keep = [i for i, item in enumerate(fit.constants) if item.name != "Y12"]
    assert np.abs((fit.values[keep] - other.values) / other.sigmas).max() < 1e-6
    np.testing.assert_allclose(fit.sigmas[keep], other.sigmas, rtol=1e-9)


def _by_band(lines: LineList):
    """Parts of `campaign`, in its order."""
    key = np.stack([lines.source, lines.isotopologue, lines.v_upper, lines.v_lower])
    edges = np.flatnonzero(np.any(key[:, 1:] != key[:, :-1], axis=0)) + 1
    return [lines.subset(piece) for piece in np.split(np.arange(len(lines)), edges)]


@few
@given(seeds)
def test_triangles_of_two_lists_merge_to_the_fit_of_both(seed):
    lines = noisy(campaign(), seed)
    first, second = lines.subset(lines.v_upper < 2), lines.subset(lines.v_upper == 2)
    whole = fitted(lines)
    # The old list alone reaches two levels only and needs a prior, which is the last of its triangles.
    priors = {name: Prior(value, 1e-3) for name, value in (("Y20", -2.25), ("Y12", -6e-10))}
    old = fitted(first, priors=priors)
    old_triangles = old.triangles[: len(old.groups)]
    of_second = [t for t, v in zip(whole.triangles, whole.groups.v_upper, strict=True) if v == 2]
    assert sum(t.n for t in of_second) == len(second)
    together = merge([*old_triangles, *of_second], base=whole.values)
    assert np.abs((solve(together) - whole.values) / whole.sigmas).max() < 1e-9
    sigmas = np.sqrt((covariance_factor(together.r) ** 2).sum(axis=1))
    np.testing.assert_allclose(sigmas, whole.sigmas, rtol=1e-9)
    assert together.rss == pytest.approx(whole.statistics.chi2, rel=1e-9)


def test_statistics_are_those_of_the_residuals():
    lines = noisy(campaign(), 9)
    fit = fitted(lines)
    statistics, z = fit.statistics, fit.residuals / lines.sigma
    assert statistics.lines == len(lines)
    assert statistics.parameters == len(fit.values) == 8
    assert statistics.dof == len(lines) - 8
    assert statistics.chi2 == pytest.approx(z @ z, rel=1e-9)
    log_likelihood = -0.5 * (z @ z) - np.log(lines.sigma).sum() - 0.5 * len(lines) * np.log(2 * np.pi)
    assert statistics.log_likelihood == pytest.approx(log_likelihood, rel=1e-12)
    assert statistics.bic == pytest.approx(8 * np.log(len(lines)) - 2 * log_likelihood, rel=1e-12)


@pytest.mark.slow
def test_stated_sigmas_cover():
    """Normal errors of the stated size: 500 lists, errors of every constant over its sigma have rms 1."""
    clean = campaign()
    order = [item.name for item in fitted(clean).constants]
    expected = {f"Y{k}{l}": value for (k, l), value in TRUTH.items()}
    expected |= {f"d{k}{l}_{atom}": value for (atom, k, l), value in BREAKDOWN_TRUTH.items()}
    target = np.array([expected[name] for name in order])
    z = []
    for seed in range(500):
        fit = fitted(noisy(clean, seed))
        z.append((fit.values - target) / fit.sigmas)
    # The rms of 500 normal numbers has a standard deviation of 0.032.
    np.testing.assert_allclose(np.sqrt(np.mean(np.square(z), axis=0)), 1.0, atol=4 * 0.032)
