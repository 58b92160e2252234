"""The global fit: all lines of all bands, isotopologues and sources at once."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from types import MappingProxyType

import numpy as np
from scipy.linalg import cholesky

from dunhamfit.algebra.criteria import aicc, bic, log_likelihood, reduced_chi2
from dunhamfit.algebra.least_squares import Solution, first_triangle, refine, sharpened
from dunhamfit.algebra.rank import Rank
from dunhamfit.algebra.rows import Rows
from dunhamfit.algebra.triangle import covariance_factor, solve
from dunhamfit.fit.design import Design, build_design
from dunhamfit.fit.identify import check_rank, check_structure, floating_bands, listed
from dunhamfit.fit.model import Model, Prior
from dunhamfit.fit.noise import Noise, as_stated, check_policy, estimate
from dunhamfit.fit.record import Fit, Statistics
from dunhamfit.lines.line_list import LineList
from dunhamfit.molecule.isotopologue import Isotopologue
from dunhamfit.molecule.masses import Masses
from dunhamfit.molecule.terms import BreakdownTerm, TermSet, parse_indices

# The factor of well-conditioned rows is good to eps * condition; from here on it is sharpened, so
# that every sigma keeps nine digits.
_SHARPEN_ABOVE = 1e6
# Outside these a noise factor is said in plain words.
SMALL_FACTOR, LARGE_FACTOR = 0.5, 2.0


def make_model(
    lines: LineList,
    terms: TermSet,
    *,
    reference: str,
    breakdown: Mapping[str, Sequence[str]] | None = None,
    priors: Mapping[str, Prior] | None = None,
    masses: Masses | None = None,
) -> Model:
    """The model of a fit to `lines`.

    Parameters
    ----------
    lines : LineList
        Its sources say which calibration terms there are.
    terms : TermSet
    reference : str
        Isotopologue whose Y_kl the terms are, such as `28Si32S`.
    breakdown : mapping from element symbol to names such as "10", optional
    priors : mapping from the name of a constant to Prior, optional
        A sigma of 0 fixes the constant.
    masses : Masses, optional
        AME2020 if not given.
    """
    masses = masses or Masses.ame2020()
    used = np.unique(lines.source[lines.used])
    calibrated = [lines.sources[code] for code in used]
    return Model(
        reference=Isotopologue.parse(reference, masses),
        terms=terms,
        breakdown=tuple(
            BreakdownTerm(atom, *parse_indices(name))
            for atom, names in (breakdown or {}).items()
            for name in names
        ),
        calibration=tuple(s for s in calibrated if s.offset is not None or s.scale is not None),
        priors=MappingProxyType(dict(priors or {})),
        masses=masses,
    )


def fit_lines(
    lines: LineList,
    terms: TermSet,
    *,
    reference: str,
    breakdown: Mapping[str, Sequence[str]] | None = None,
    priors: Mapping[str, Prior] | None = None,
    policy: str = "stated",
    masses: Masses | None = None,
) -> Fit:
    """Fit Dunham coefficients to all used lines at once.

    Parameters are those of `make_model`; `policy` is one of `dunhamfit.fit.noise.POLICIES`.

    Returns
    -------
    Fit

    Raises
    ------
    UsageError
        For a policy, isotopologue or term that does not exist.
    CannotDetermine
        If the lines cannot determine the model; no constants are made.
    NotConverged
        If the noise factors or the refinement do not settle.
    """
    model = make_model(lines, terms, reference=reference, breakdown=breakdown, priors=priors, masses=masses)
    return fit_model(model, lines, policy=policy)


def fit_model(model: Model, lines: LineList, *, policy: str = "stated") -> Fit:
    """Fit an assembled model; raises what `fit_lines` raises."""
    check_policy(policy)
    design = build_design(model, lines)
    check_structure(model, lines, design)
    free = np.flatnonzero(~model.fixed)
    given = np.array([0.0 if (p := model.prior(item)) is None else p.value for item in model.parameters])
    rows = design.rows if len(free) == len(given) else design.rows.held(*_fixed(model, given))
    start = first_triangle(rows)
    rank = check_rank(model, start.r)
    solution = refine(rows, start.r, solve(start))
    noise, allowance = as_stated(design.groups), None
    if policy != "stated":
        noise, allowance = estimate(policy, rows.triangles(solution.values), design.groups, lines)
        rows = rows.reweighted(_row_factors(noise, rows))
        solution = refine(rows, first_triangle(rows).r, solution.values)
    factor = np.zeros((len(given), len(free)))
    factor[free] = _factor(rows, solution, rank, allowance)
    values = given
    values[free] = solution.values
    return Fit(
        model=model,
        lines=lines,
        values=values,
        factor=factor,
        noise=noise,
        groups=design.groups,
        statistics=_statistics(design, rows, solution, rank, noise),
        warnings=_warnings(lines, design, noise, rank),
        design_made=design,
    )


def _fixed(model: Model, given: np.ndarray):
    columns = np.flatnonzero(model.fixed)
    return columns, given[columns]


def _row_factors(noise: Noise, rows: Rows) -> np.ndarray:
    """Factor of each group of rows; priors, the last group where there are any, keep theirs."""
    factors = np.ones(len(rows.lines))
    factors[: len(noise.label)] = noise.by_group
    return factors


def _factor(rows: Rows, solution: Solution, rank: Rank, allowance: np.ndarray | None) -> np.ndarray:
    """F with covariance F F^T, the allowance for estimated noise factors included."""
    r = sharpened(rows, solution.r) if rank.condition > _SHARPEN_ABOVE else solution.r
    factor = covariance_factor(r)
    if allowance is None:
        return factor
    return factor @ cholesky(np.eye(len(r)) + r @ allowance @ r.T, lower=True)


def _statistics(design: Design, rows: Rows, solution: Solution, rank: Rank, noise: Noise) -> Statistics:
    lines, data, parameters = len(design.used), int(rows.lines.sum()), len(solution.values)
    stated = solution.residuals.high * design.rows.scale
    chi2 = float(stated @ stated) + float(design.rows.spread.sum())
    dof = data - parameters
    likelihood = log_likelihood(solution.chi2, data, float(rows.log_sigma.sum()))
    counted = parameters + len(noise.factors)
    return Statistics(
        lines=lines,
        parameters=parameters,
        dof=dof,
        chi2=chi2,
        reduced_chi2=reduced_chi2(chi2, dof),
        condition=rank.condition,
        log_likelihood=likelihood,
        aicc=aicc(likelihood, data, counted),
        bic=bic(likelihood, data, counted),
    )


def _warnings(lines: LineList, design: Design, noise: Noise, rank: Rank) -> tuple[str, ...]:
    texts = []
    floating = floating_bands(lines, design)
    if floating:
        texts.append(
            f"bands {listed(floating)} share no vibrational level with the rest: only the form of the model, "
            "and no line, ties them to it"
        )
    for name, factor, known in zip(noise.names, noise.factors, noise.determined, strict=True):
        if not known:
            texts.append(f"{name}: too few lines to tell a noise factor; the stated uncertainties are kept")
        elif factor > LARGE_FACTOR:
            texts.append(
                f"{name}: the lines scatter {factor:.3g} times more than their stated uncertainties say"
            )
        elif factor < SMALL_FACTOR:
            texts.append(
                f"{name}: the lines scatter {1 / factor:.3g} times less than their stated uncertainties say"
            )
    return tuple(texts)
