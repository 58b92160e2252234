"""Fits in which the parameters follow from fewer ones: relations between terms, or one potential.

The lines enter through their triangles, so that a step costs p x p work. lmfit minimises
|R (c(theta) - base) - z|^2 in steps of one sigma, with analytic derivatives and the user's
bounds; Gauss-Newton steps, each a linear problem within the bounds (C. L. Lawson and R. J. Hanson,
Solving Least Squares Problems, ch. 23), then settle which bounds hold and the last digits.
Covariance is propagated through the Jacobian J of the map c(theta):
C = J (J^T R^T R J)^-1 J^T, from triangular solves.
"""

from __future__ import annotations

from collections.abc import Mapping
from types import MappingProxyType
from typing import Protocol

import lmfit
import numpy as np
from scipy.linalg import cholesky, solve_triangular
from scipy.optimize import lsq_linear

from dunhamfit.algebra.least_squares import refine
from dunhamfit.algebra.rank import judge
from dunhamfit.algebra.triangle import Triangle, covariance_factor, merge, reduce_rows, solve
from dunhamfit.errors import CannotDetermine, NotConverged, UsageError
from dunhamfit.fit.design import Design, build_design
from dunhamfit.fit.identify import listed
from dunhamfit.fit.merit import statistics_of
from dunhamfit.fit.model import Model
from dunhamfit.fit.noise import Noise, as_stated, check_policy, estimate
from dunhamfit.fit.record import Fit
from dunhamfit.inference.origins import given_origins
from dunhamfit.inference.potential_fit import PotentialMap
from dunhamfit.inference.relations import Relations, identifier, step_name
from dunhamfit.lines.line_list import LineList

_ROUNDS = 30
# Steps below this, in sigma, are below anything that is read off; so are steps in the last places.
_SETTLED = 1e-4
_LAST_PLACES = 64.0
# Noise factors and constants are found in turn until no factor changes by more than this.
_SAME_FACTOR = 1e-6


class ParameterMap(Protocol):
    """What `Relations` and `PotentialMap` give: all parameters from the free ones, with derivatives."""

    names: tuple[str, ...]
    origins: Mapping[str, str]
    related: tuple[int, ...]

    def start(self, values: np.ndarray) -> np.ndarray: ...
    def values(self, free: np.ndarray) -> np.ndarray: ...
    def jacobian(self, free: np.ndarray) -> np.ndarray: ...
    def parameters(self, start: np.ndarray, scale: np.ndarray, limits: np.ndarray) -> lmfit.Parameters: ...
    def read(self, parameters: lmfit.Parameters) -> np.ndarray: ...


def make_constraint(model: Model, relations: Mapping[str, str], potential: int) -> ParameterMap:
    """The map of a potential to a_N where `potential` is N, else that of the relations."""
    return PotentialMap(model, potential) if potential else Relations(model, relations)


def fit_constrained(
    model: Model,
    lines: LineList,
    constraint: ParameterMap,
    *,
    policy: str = "stated",
    bounds: Mapping[str, tuple[float, float]] = MappingProxyType({}),
) -> Fit:
    """Fit the free parameters of a constraint to all used lines.

    Parameters
    ----------
    model : Model
    lines : LineList
    constraint : Relations or PotentialMap
    policy : one of `dunhamfit.fit.noise.POLICIES`
    bounds : mapping from the name of a free parameter to (lowest, highest), cm-1

    Returns
    -------
    Fit
        `origins` says which constants follow from others; a bound that is active is a warning.

    Raises
    ------
    UsageError
        For a bound on a parameter that is not free, or one that excludes everything.
    CannotDetermine
        If the lines cannot determine the free parameters.
    NotConverged
        With the free parameters reached.
    """
    check_policy(policy)
    limits = _limits(constraint, bounds)
    design = build_design(model, lines)
    free = _starting_point(model, design, constraint)
    noise = as_stated(design.groups)
    for _ in range(_ROUNDS):
        triangles = design.rows.triangles(constraint.values(free))
        free, active = _minimise(_weighted(triangles, noise), constraint, free, limits)
        triangles = design.rows.triangles(constraint.values(free))
        if policy == "stated":
            allowance = None
            break
        projected = [_projected(item, constraint, free, ~active) for item in triangles]
        new, allowance = estimate(policy, tuple(projected), design.groups, lines)
        change = np.max(np.abs(np.log(new.by_group / noise.by_group)))
        noise = new
        if change < _SAME_FACTOR:
            break
    else:
        raise NotConverged("noise factors and constants did not settle together", state={"factors": noise.factors})
    r = merge([_projected(item, constraint, free, ~active) for item in _weighted(triangles, noise)]).r
    inner = covariance_factor(r)
    if allowance is not None:
        inner = inner @ cholesky(np.eye(len(r)) + r @ allowance @ r.T, lower=True)
    values = constraint.values(free)
    return Fit(
        model=model,
        lines=lines,
        values=values,
        factor=constraint.jacobian(free)[:, ~active] @ inner,
        noise=noise,
        groups=design.groups,
        statistics=statistics_of(
            [item.shifted(values) for item in triangles], noise, parameters=len(r), condition=judge(r).condition
        ),
        warnings=_bound_warnings(constraint, active, bounds),
        origins=MappingProxyType({**given_origins(model), **constraint.origins}),
        design_made=design,
    )


def free_values(fit: Fit, constraint: ParameterMap, start: np.ndarray) -> np.ndarray:
    """Free parameters that give the constants of a constrained fit, shape (q,), by Gauss-Newton from `start`."""
    jacobian = constraint.jacobian(start)
    scale = np.where(fit.sigmas > 0, fit.sigmas, 1.0)
    rows = Triangle(np.diag(1.0 / scale), np.zeros(len(scale)), 0.0, len(scale), fit.values)
    free, _ = _minimise([rows], constraint, start, np.tile([-np.inf, np.inf], (jacobian.shape[1], 1)))
    return free


def _limits(constraint: ParameterMap, bounds: Mapping[str, tuple[float, float]]) -> np.ndarray:
    limits = np.tile([-np.inf, np.inf], (len(constraint.names), 1))
    words = [identifier(name) for name in constraint.names]
    for name, (low, high) in bounds.items():
        if identifier(name) not in words:
            raise UsageError(f"bounds: '{name}' is not free; free are {', '.join(constraint.names)}")
        if not low < high:
            raise UsageError(f"bounds: '{name}' must lie between a lower and a higher value (got {low} and {high})")
        limits[words.index(identifier(name))] = low, high
    return limits


def _starting_point(model: Model, design: Design, constraint: ParameterMap) -> np.ndarray:
    """Free parameters of a few linear fits in which the related constants are held at what the last one gave.

    Terms that the lines alone cannot determine are held at zero: the constraint will tell them.
    """
    values = np.array([0.0 if (p := model.prior(item)) is None else p.value for item in model.parameters])
    related = list(constraint.related)
    held = sorted({*np.flatnonzero(model.fixed).tolist(), *related})
    settled = 0
    while settled < (4 if related else 1):
        free = np.setdiff1d(np.arange(len(values)), held)
        rows = design.rows.held(held, values[held]) if held else design.rows
        triangle = rows.triangle()
        lost = judge(triangle.r).dependent
        if lost:
            held = sorted({*held, *free[list(lost)].tolist()})
            continue
        values[free] = refine(rows, triangle.r, solve(triangle)).values
        values[related] = constraint.values(constraint.start(values))[related]
        settled += 1
    return constraint.start(values)


def _weighted(triangles, noise: Noise) -> list[Triangle]:
    """Triangles with the noise factors; those of priors, which come last, as they are."""
    factors = noise.by_group
    return [t.scaled(f) for t, f in zip(triangles, factors, strict=False)] + list(triangles[len(factors) :])


def _projected(triangle: Triangle, constraint: ParameterMap, free: np.ndarray, kept: np.ndarray) -> Triangle:
    """The triangle of the free parameters about `free`, linearised."""
    moved = triangle.z - triangle.r @ (constraint.values(free) - triangle.base)
    rows = triangle.r @ constraint.jacobian(free)[:, kept]
    return reduce_rows(rows, moved, free[kept], n=triangle.n, rss=triangle.rss, log_sigma=triangle.log_sigma)


def _minimise(triangles, constraint: ParameterMap, start: np.ndarray, limits: np.ndarray):
    """Free parameters at the minimum, and which of them stand at a bound."""
    whole = merge(triangles)
    r = _checked(_projected(whole, constraint, start, np.ones(len(start), dtype=bool)).r, constraint)
    scale = np.sqrt((covariance_factor(r) ** 2).sum(axis=1))
    steps = (limits - start[:, None]) / scale[:, None]
    inside = np.clip(0.0, steps[:, 0], steps[:, 1])
    start = start + scale * inside
    parameters = constraint.parameters(start, scale, (limits - start[:, None]) / scale[:, None])

    def residual(found: lmfit.Parameters) -> np.ndarray:
        return whole.r @ (constraint.read(found) - whole.base) - whole.z

    def derivatives(found: lmfit.Parameters) -> np.ndarray:
        here = start + scale * _steps(found, len(start))
        return (whole.r @ constraint.jacobian(here)) * scale

    result = lmfit.minimize(
        residual, parameters, method="leastsq", scale_covar=False, Dfun=derivatives, xtol=1e-14, ftol=1e-14, gtol=0.0
    )
    free = np.clip(start + scale * _steps(result.params, len(start)), *limits.T)
    return _settled(whole, constraint, free, scale, limits)


def _steps(parameters: lmfit.Parameters, count: int) -> np.ndarray:
    return np.array([parameters[step_name(place)].value for place in range(count)])


def _settled(whole: Triangle, constraint: ParameterMap, free: np.ndarray, scale: np.ndarray, limits: np.ndarray):
    """Gauss-Newton steps within the limits for as long as they shrink, then a check that they are small."""
    last = np.inf
    for _ in range(_ROUNDS):
        local = _projected(whole, constraint, free, np.ones(len(free), dtype=bool))
        step, active = _step(local, (limits - free[:, None]) / scale[:, None], scale)
        size = float(np.linalg.norm(local.r @ step))
        if not size < last / 2:
            break
        free, last = np.clip(free + step, *limits.T), size
    if np.all(np.abs(step) <= np.maximum(_SETTLED * scale, _LAST_PLACES * np.spacing(np.abs(free)))):
        return free, active
    raise NotConverged(
        "the constrained fit did not settle; start from terms that the lines determine better",
        state=dict(zip(constraint.names, free.tolist(), strict=True)),
    )


def _step(local: Triangle, steps: np.ndarray, scale: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """The step to the minimum of a linear problem, and which free parameters stand at a bound there.

    Bounds are on either side of the present values: lmfit comes near to one that holds, but never says
    whether it does, and cannot leave one that it starts from.
    """
    if not np.any(np.isfinite(steps)):
        return solve_triangular(local.r, local.z), np.zeros(len(scale), dtype=bool)
    found = lsq_linear(local.r * scale, local.z, bounds=(steps[:, 0], steps[:, 1]), method="bvls")
    return scale * found.x, found.active_mask != 0


def _checked(r: np.ndarray, constraint: ParameterMap) -> np.ndarray:
    rank = judge(r)
    if rank.dependent:
        names = [constraint.names[i] for i in rank.dependent]
        raise CannotDetermine(
            f"the data cannot determine {listed(names)} beside the other free parameters; "
            "fix or relate them, ask for fewer, or add lines",
            terms=names,
        )
    return r


def _bound_warnings(constraint: ParameterMap, active: np.ndarray, bounds) -> tuple[str, ...]:
    given = {identifier(name): list(pair) for name, pair in bounds.items()}
    return tuple(
        f"{name} stands at a bound of {given[identifier(name)]}{'' if name.startswith(('a_', 'scale[')) else ' cm-1'}: "
        "its sigma is shown as 0, and those of other constants take it as known"
        for name, at_bound in zip(constraint.names, active, strict=True)
        if at_bound
    )
