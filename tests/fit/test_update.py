"""Taking new lines into a fit gives what a fit to all lines gives, without a look at the old ones."""

from __future__ import annotations

from dataclasses import fields, replace
from itertools import permutations

import numpy as np
import pytest

from dunhamfit.errors import CannotDetermine, UsageError
from dunhamfit.fit.model import Prior
from dunhamfit.fit.noise import POLICIES
from dunhamfit.fit.record import Fit
from dunhamfit.fit.solve import fit_lines, fit_model
from dunhamfit.fit.update import update_fit
from dunhamfit.lines.deferred import DeferredLines, Part
from dunhamfit.lines.line_list import LineList, Source, merge
from dunhamfit.molecule.terms import TermSet

# An invented molecule; energies as in J. L. Dunham, Phys. Rev. 41, 721 (1932).
TRUTH = {(1, 0): 701.25, (2, 0): -2.75, (0, 1): 0.3125, (1, 1): -0.0015, (0, 2): -2.5e-7}
TERMS = TermSet(TRUTH)
# What the project promises of a refit, in units of sigma; and of a sigma, as a part of itself.
EQUAL = 1e-9


def band(name: str, upper: int, lower: int, *, seed: int, noise: float = 1.0, j_max: int = 20, **shared) -> LineList:
    """Noisy R and P lines of one band, some of them measured twice."""
    rng = np.random.default_rng(seed)
    j = np.arange(1, j_max + 1)
    j_lower = np.concatenate([j, j, j[:5]])
    j_upper = np.concatenate([j + 1, j - 1, j[:5] + 1])
    zero = np.zeros(len(j_lower), dtype=int)

    def energy(v, j):
        return sum(value * (v + 0.5) ** k * (j * (j + 1.0)) ** l for (k, l), value in TRUTH.items())

    sigma = rng.uniform(0.5e-4, 2e-4, len(zero))
    return LineList(
        position=energy(upper, j_upper) - energy(lower, j_lower) + rng.normal(0, noise * sigma),
        sigma=sigma,
        v_upper=zero + upper,
        j_upper=j_upper,
        v_lower=zero + lower,
        j_lower=j_lower,
        isotopologue=zero,
        source=zero,
        file=zero,
        row=np.arange(1, len(zero) + 1),
        exclusion=zero,
        isotopologues=("28Si32S",),
        sources=(Source(name, **shared),),
    )


def old_lines() -> LineList:
    return merge(
        [
            band("oven", 1, 0, seed=1, offset=2e-5),
            band("oven", 2, 1, seed=2, noise=1.5, offset=2e-5),
            band("jet", 2, 0, seed=3),
        ]
    )


def assert_same(found: Fit, expected: Fit) -> None:
    assert found.model.names == expected.model.names
    free = ~expected.model.fixed
    assert np.array_equal(found.values[~free], expected.values[~free])
    assert np.max(np.abs(found.values - expected.values)[free] / expected.sigmas[free]) < EQUAL
    assert found.sigmas == pytest.approx(expected.sigmas, rel=EQUAL)
    assert found.noise.names == expected.noise.names
    assert found.noise.factors == pytest.approx(expected.noise.factors, rel=EQUAL)
    for item in fields(expected.groups):
        assert np.array_equal(getattr(found.groups, item.name), getattr(expected.groups, item.name))
    for item in fields(expected.statistics):
        one, other = getattr(found.statistics, item.name), getattr(expected.statistics, item.name)
        assert one == pytest.approx(other, rel=1e-9), item.name
    assert found.warnings == expected.warnings
    for one, other in zip(found.triangles, expected.triangles, strict=True):
        assert one.chi2(expected.values) == pytest.approx(other.chi2(expected.values), rel=1e-9, abs=1e-9)


@pytest.mark.parametrize("policy", POLICIES)
@pytest.mark.parametrize("shared", [{}, {"offset": 1e-5}, {"offset": np.inf, "scale": 1e-7}])
def test_update_is_the_fit_to_all_lines(policy, shared):
    fit = fit_lines(old_lines(), TERMS, reference="28Si32S", policy=policy)
    new = band("winter", 3, 2, seed=4, noise=2.5, **shared)
    found = update_fit(fit, new)
    assert_same(found, fit_model(found.model, merge([fit.lines, new]), policy=policy))
    assert len(found.lines) == len(fit.lines) + len(new)


def test_fixed_constants_and_priors_stay():
    priors = {"Y02": Prior(-2.5e-7, 1e-9), "Y12": Prior(-1e-12, 0.0)}
    terms = TermSet([*TERMS, (1, 2)])
    fit = fit_lines(old_lines(), terms, reference="28Si32S", priors=priors, policy="per-source")
    new = band("winter", 3, 2, seed=4, scale=1e-7)
    found = update_fit(fit, new)
    assert found.values[found.index(1, 2)] == -1e-12
    assert_same(found, fit_model(found.model, merge([fit.lines, new]), policy="per-source"))


@pytest.mark.parametrize("policy", ["stated", "per-source"])
def test_order_of_arrival_does_not_matter(policy):
    """Three bands in all six orders against one fit."""
    fit = fit_lines(old_lines(), TERMS, reference="28Si32S", policy=policy)
    bands = [
        band("winter", 3, 2, seed=4, offset=1e-5),
        band("spring", 3, 1, seed=5, noise=2.0),
        band("summer", 4, 3, seed=6, scale=np.inf),
    ]
    whole = fit_lines(merge([fit.lines, *bands]), TERMS, reference="28Si32S", policy=policy)
    for order in permutations(bands):
        found = fit
        for new in order:
            found = update_fit(found, new)
        places = [found.model.names.index(name) for name in whole.model.names]
        assert np.max(np.abs(found.values[places] - whole.values) / whole.sigmas) < EQUAL
        assert found.sigmas[places] == pytest.approx(whole.sigmas, rel=EQUAL)


def test_against_numpy_least_squares():
    """All lines at once by numpy, offsets with their priors as rows."""
    fit = update_fit(fit_lines(old_lines(), TERMS, reference="28Si32S"), band("winter", 3, 2, seed=4, offset=1e-5))
    lines = fit.lines

    def level(v, j):
        return np.array([(v + 0.5) ** k * (j * (j + 1.0)) ** l for k, l in ((t.k, t.l) for t in TERMS)])

    columns = level(lines.v_upper, lines.j_upper) - level(lines.v_lower, lines.j_lower)
    rows = np.column_stack([columns.T, lines.source == 0, lines.source == 2]) / lines.sigma[:, None]
    priors = np.zeros((2, rows.shape[1]))
    priors[0, -2], priors[1, -1] = 1 / 2e-5, 1 / 1e-5
    rows = np.vstack([rows, priors])
    norms = np.linalg.norm(rows, axis=0)
    target = np.append(lines.position / lines.sigma, [0.0, 0.0])
    values = np.linalg.lstsq(rows / norms, target, rcond=None)[0] / norms
    sigmas = np.linalg.norm(np.linalg.inv(np.linalg.qr(rows / norms, mode="r")), axis=1) / norms
    # lstsq in plain floats: eps * 7e6 (position over sigma) * condition.
    assert np.max(np.abs(fit.values - values) / sigmas) < 1e-5
    assert fit.sigmas == pytest.approx(sigmas, rel=1e-8)


def test_old_lines_are_not_read():
    fit = fit_lines(old_lines(), TERMS, reference="28Si32S", policy="per-source")
    new = band("winter", 3, 2, seed=4)
    expected = update_fit(fit, new)

    def read():
        raise AssertionError("old lines were read")

    deferred = DeferredLines.of(
        [Part(0, len(fit.lines), read)],
        isotopologues=fit.lines.isotopologues,
        sources=fit.lines.sources,
        reasons=fit.lines.reasons,
    )
    late = replace(fit, lines=deferred, design_made=None)
    vars(late)["triangles"] = fit.triangles
    found = update_fit(late, new)
    assert np.array_equal(found.values, expected.values)
    assert np.array_equal(found.factor, expected.factor)
    assert len(found.lines) == len(fit.lines) + len(new)


def test_lines_that_would_count_double_are_refused():
    old = merge([band("oven", 1, 0, seed=1, files=("a.csv",), digests=("ab",)), band("jet", 2, 1, seed=2)])
    fit = fit_lines(old, TERMS, reference="28Si32S")
    with pytest.raises(UsageError, match="there is a source 'oven' already"):
        update_fit(fit, band("oven", 3, 2, seed=4))
    with pytest.raises(UsageError, match=r"copy.csv was read as source 'oven' already"):
        update_fit(fit, band("winter", 1, 0, seed=4, files=("copy.csv",), digests=("ab",)))


def test_what_cannot_be_done_is_said():
    fit = fit_lines(old_lines(), TERMS, reference="28Si32S")
    with pytest.raises(UsageError, match="robust loss 'huber'"):
        update_fit(replace(fit, robust="huber"), band("winter", 3, 2, seed=4))
    new = band("winter", 3, 2, seed=4)
    with pytest.raises(CannotDetermine, match="no line is used"):
        update_fit(fit, new.excluded(new.used, "all of them"))
    one = band("winter", 3, 2, seed=4, offset=np.inf, scale=np.inf)
    with pytest.raises(CannotDetermine, match=r"offset\[winter\]|scale\[winter\]"):
        update_fit(fit, one.excluded(np.arange(len(one)) > 0, "all but one"))
