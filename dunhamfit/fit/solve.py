"""The global fit: all lines of all bands, isotopologues and sources at once."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np
from scipy.linalg import cholesky

from dunhamfit.algebra.criteria import aicc, bic, log_likelihood, reduced_chi2
from dunhamfit.algebra.least_squares import Solution, refine, sharpened
from dunhamfit.algebra.rank import Rank
from dunhamfit.algebra.robust import loss
from dunhamfit.algebra.rows import Rows
from dunhamfit.algebra.triangle import covariance_factor, solve
from dunhamfit.fit.design import Design, build_design
from dunhamfit.fit.identify import check_rank, check_structure, floating_bands, listed
from dunhamfit.fit.model import Model, Prior
from dunhamfit.fit.noise import Noise, as_stated, check_policy, estimate
from dunhamfit.fit.record import Fit, Statistics
from dunhamfit.fit.remarks import noise_remarks
from dunhamfit.fit.robust import Reweighted, reweight
from dunhamfit.lines.line_list import LineList
from dunhamfit.molecule.isotopologue import Isotopologue
from dunhamfit.molecule.masses import Masses
from dunhamfit.molecule.terms import BreakdownTerm, TermSet, parse_indices

# The factor of well-conditioned rows is good to eps * condition; from here on it is sharpened, so
# that every sigma keeps nine digits.
_SHARPEN_ABOVE = 1e6


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
    used = np.flatnonzero(np.bincount(lines.source[lines.used]))
    calibrated = [lines.sources[code] for code in used]
    return Model(
        reference=Isotopologue.parse(reference, masses),
        terms=terms,
        breakdown=tuple(
            BreakdownTerm(atom, *parse_indices(name)) for atom, names in (breakdown or {}).items() for name in names
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
    robust: str = "none",
    masses: Masses | None = None,
) -> Fit:
    """Fit Dunham coefficients to all used lines at once.

    Parameters are those of `make_model`; `policy` is one of `dunhamfit.fit.noise.POLICIES`,
    `robust` one of `dunhamfit.algebra.robust.LOSSES`.

    Returns
    -------
    Fit

    Raises
    ------
    UsageError
        For a policy, robust loss, isotopologue or term that does not exist.
    CannotDetermine
        If the lines cannot determine the model; no constants are made.
    NotConverged
        If the noise factors, the robust weights or the refinement do not settle.
    """
    model = make_model(lines, terms, reference=reference, breakdown=breakdown, priors=priors, masses=masses)
    return fit_model(model, lines, policy=policy, robust=robust)


def fit_model(model: Model, lines: LineList, *, policy: str = "stated", robust: str = "none") -> Fit:
    """Fit an assembled model; raises what `fit_lines` raises."""
    check_policy(policy)
    chosen_loss = loss(robust)
    design = build_design(model, lines)
    check_structure(model, lines, design)
    given = np.array([0.0 if (p := model.prior(item)) is None else p.value for item in model.parameters])
    rows = _free_rows(model, design, given)
    start = rows.triangle()
    rank = check_rank(model, start.r)
    solution = refine(rows, start.r, solve(start))
    if robust == "none":
        outcome = _plain(lines, design, rows, solution, rank, policy)
    else:
        found = reweight(design, rows, solution, loss=chosen_loss, policy=policy, lines=lines)
        outcome = _reweighted(model, lines, rows, given, found)
    free = np.flatnonzero(~model.fixed)
    factor = np.zeros((len(given), len(free)))
    factor[free] = outcome.factor
    values = given
    values[free] = outcome.values
    return Fit(
        model=model,
        lines=lines,
        values=values,
        factor=factor,
        noise=outcome.noise,
        groups=design.groups,
        statistics=_statistics(rows, rank, outcome),
        warnings=_warnings(lines, design, outcome.noise, rank),
        robust=robust,
        line_weights=outcome.line_weights,
        design_made=outcome.design,
    )


@dataclass(frozen=True, eq=False)
class _Outcome:
    """Free parameters of a fit; `residual` is that of the rows with stated uncertainties, cm-1."""

    values: np.ndarray
    factor: np.ndarray
    residual: np.ndarray
    noise: Noise
    log_likelihood: float
    design: Design
    line_weights: np.ndarray | None = None


def _plain(lines: LineList, design: Design, rows: Rows, solution: Solution, rank: Rank, policy: str) -> _Outcome:
    noise, allowance, weighted = as_stated(design.groups), None, rows
    if policy != "stated":
        noise, allowance = estimate(policy, rows.triangles(solution.values), design.groups, lines)
        weighted = rows.reweighted(_row_factors(noise, rows))
        solution = refine(weighted, weighted.triangle().r, solution.values)
    likelihood = log_likelihood(solution.chi2, int(rows.lines.sum()), float(weighted.log_sigma.sum()))
    factor = _factor(weighted, solution, rank, allowance)
    return _Outcome(solution.values, factor, solution.residuals.high, noise, likelihood, design)


def _reweighted(model: Model, lines: LineList, rows: Rows, given: np.ndarray, found: Reweighted) -> _Outcome:
    design = build_design(model, lines, found.line_weights)
    weighted = _free_rows(model, design, given).reweighted(_row_factors(found.noise, rows))
    values = refine(weighted, weighted.triangle().r, found.values).values
    residual = rows.residuals(values).high
    return _Outcome(values, found.factor, residual, found.noise, found.log_likelihood, design, found.line_weights)


def _free_rows(model: Model, design: Design, given: np.ndarray) -> Rows:
    """Rows of the free parameters."""
    columns = np.flatnonzero(model.fixed)
    return design.rows.held(columns, given[columns]) if len(columns) else design.rows


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


def _statistics(rows: Rows, rank: Rank, outcome: _Outcome) -> Statistics:
    data, parameters = int(rows.lines.sum()), rows.parameters
    stated = outcome.residual * rows.scale
    chi2 = float(stated @ stated) + float(rows.spread.sum())
    dof = data - parameters
    counted = parameters + len(outcome.noise.factors)
    return Statistics(
        lines=int(rows.lines[: len(outcome.noise.label)].sum()),
        parameters=parameters,
        dof=dof,
        chi2=chi2,
        reduced_chi2=reduced_chi2(chi2, dof),
        condition=rank.condition,
        log_likelihood=outcome.log_likelihood,
        aicc=aicc(outcome.log_likelihood, data, counted),
        bic=bic(outcome.log_likelihood, data, counted),
    )


def _warnings(lines: LineList, design: Design, noise: Noise, rank: Rank) -> tuple[str, ...]:
    texts = []
    floating = floating_bands(design.groups)
    if floating:
        texts.append(
            f"bands {listed(floating)} share no vibrational level with the rest: only the form of the model, "
            "and no line, ties them to it"
        )
    return (*texts, *noise_remarks(noise))
