"""Do the error bars cover? The user's own line list, simulated from the fitted model and fitted again, many times.

Each set of lines is what the model says the lines could have been: calculated positions, noise of
the stated uncertainties times the noise factors, and for each source one offset and one scale
error drawn from their priors (free ones stay as fitted). Priors of constants are measurements
too: their values are drawn about the fitted constants. The sets are fitted as the lines were, so
that the noise factors are estimated anew, and by the same robust loss. (Parametric bootstrap: B.
Efron and R. J. Tibshirani, An Introduction to the Bootstrap, 1993, section 6.5, from memory.)
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from concurrent.futures import Executor, as_completed
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from scipy.special import erf

from dunhamfit.algebra.criteria import coverage_factor
from dunhamfit.errors import CannotDetermine, NotConverged, UsageError
from dunhamfit.fit.design import calculate
from dunhamfit.fit.model import Model, Prior
from dunhamfit.fit.record import Fit
from dunhamfit.fit.solve import fit_model
from dunhamfit.inference.degrees import effective_degrees
from dunhamfit.lines.line_list import LineList

LEVELS = (float(erf(np.sqrt(0.5))), 0.95)
# Sets that one task of an executor works through: long against handing over the lines, short against the wait.
_TASK = 20


@dataclass(frozen=True, eq=False)
class Coverage:
    """How often the intervals of simulated fits held the constants they were simulated with.

    Attributes
    ----------
    names : tuple of str
        Constants that are not fixed.
    levels : tuple of float
        Probability that each interval claims.
    factors : ndarray of float, shape (levels, constants)
        Half-width of each interval in sigma: Student's factor where noise factors are estimated.
    z : ndarray of float, shape (sets, constants)
        (Fitted less true constant) / sigma of every set.
    noise_names : tuple of str
    noise : ndarray of float, shape (sets, noise factors)
        Noise factors found.
    noise_true : ndarray of float, shape (noise factors,)
    failures : tuple of str
        Why a set gave no constants, one text for each such set.
    seed : int
    """

    names: tuple[str, ...]
    levels: tuple[float, ...]
    factors: np.ndarray
    z: np.ndarray
    noise_names: tuple[str, ...]
    noise: np.ndarray
    noise_true: np.ndarray
    failures: tuple[str, ...]
    seed: int

    @property
    def sets(self) -> int:
        """Sets that gave constants."""
        return len(self.z)

    @cached_property
    def covered(self) -> np.ndarray:
        """Part of the sets whose interval held the true constant, shape (levels, constants)."""
        return (np.abs(self.z) <= self.factors[:, None, :]).mean(axis=1)

    @property
    def covered_sigmas(self) -> np.ndarray:
        """Binomial standard deviation of `covered` if the intervals keep their word, shape (levels,)."""
        levels = np.array(self.levels)
        return np.sqrt(levels * (1 - levels) / self.sets)


def simulate_lines(fit: Fit, rng: np.random.Generator) -> LineList:
    """The used lines of a fit as they could have been measured; the others stay as they are.

    Parameters
    ----------
    fit : Fit
    rng : Generator

    Returns
    -------
    LineList
    """
    return _simulated(_campaign(fit), rng)


def coverage(
    fit: Fit,
    *,
    sets: int = 400,
    seed: int,
    executor: Executor | None = None,
    progress: Callable[[int, int], None] | None = None,
) -> Coverage:
    """Simulate the lines of a fit, fit them in the same way, and count how often the intervals cover.

    Parameters
    ----------
    fit : Fit
    sets : int
    seed : int
        The result depends on it alone, not on the executor.
    executor : concurrent.futures.Executor, optional
        Runs the fits, in threads, processes or elsewhere; by default they run here.
    progress : callable, optional
        Told ``(done, sets)`` as the work goes on.

    Raises
    ------
    UsageError
        For less than one set, or a fit whose parameters are tied to each other.
    NotConverged
        If no set gave constants.
    """
    if sets < 1:
        raise UsageError(f"the number of simulated sets must be 1 or more (got {sets})")
    degrees = effective_degrees(fit)[: len(fit.constants)]
    campaign = _campaign(fit)
    seeds = np.random.SeedSequence(seed).spawn(sets)
    tasks = [seeds[start : start + _TASK] for start in range(0, sets, _TASK)]
    report = progress or _silent
    parts = _here(campaign, tasks, report) if executor is None else _elsewhere(campaign, tasks, report, executor)
    found = [item for part in parts for item in part]
    failures = tuple(item for item in found if isinstance(item, str))
    results = [item for item in found if not isinstance(item, str)]
    if not results:
        raise NotConverged(f"none of {sets} simulated sets could be fitted; the first one says: {failures[0]}")
    free = ~fit.model.fixed[: len(fit.constants)]
    return Coverage(
        names=tuple(item.name for item, chosen in zip(fit.constants, free, strict=True) if chosen),
        levels=LEVELS,
        factors=np.array([[coverage_factor(level, dof) for dof in degrees[free]] for level in LEVELS]),
        z=np.array([z for z, _ in results])[:, free],
        noise_names=fit.noise.names,
        noise=np.array([noise for _, noise in results]).reshape(len(results), -1),
        noise_true=fit.noise.factors,
        failures=failures,
        seed=seed,
    )


@dataclass(frozen=True, eq=False)
class _Campaign:
    """What a worker needs to simulate and fit again; it can be sent to another process."""

    model: Model
    lines: LineList
    values: np.ndarray
    sigma: np.ndarray
    policy: str
    robust: str


def _campaign(fit: Fit) -> _Campaign:
    lines = fit.lines.subset(slice(None))
    sigma = np.zeros(len(lines))
    sigma[fit.design.used] = lines.sigma[fit.design.used] * fit.noise.by_group[fit.design.group_of]
    # A plain dictionary of priors can be pickled.
    model = replace(fit.model, priors=dict(fit.model.priors))
    return _Campaign(model, lines, fit.values, sigma, fit.noise.policy, fit.robust)


def _simulated(campaign: _Campaign, rng: np.random.Generator) -> LineList:
    model, lines, values = campaign.model, campaign.lines, campaign.values.copy()
    for place, item in enumerate(model.parameters):
        prior = model.prior(item) if item.source else None
        if prior is not None:
            values[place] = prior.sigma * rng.standard_normal()
    calculated = calculate(model, lines, values)
    noise = calculated.low + campaign.sigma * rng.standard_normal(len(lines))
    return replace(lines, position=np.where(lines.used, calculated.high + noise, lines.position))


def _with_priors_redrawn(campaign: _Campaign, rng: np.random.Generator) -> Model:
    model = campaign.model
    drawn = {}
    for item, value in zip(model.constants, campaign.values, strict=False):
        prior = model.prior(item)
        if prior is not None and 0 < prior.sigma < np.inf:
            drawn[item.name] = Prior(value + prior.sigma * rng.standard_normal(), prior.sigma, prior.origin)
    return replace(model, priors={**model.priors, **drawn}) if drawn else model


def _run(campaign: _Campaign, seeds: Sequence[np.random.SeedSequence]) -> list[tuple[np.ndarray, np.ndarray] | str]:
    """z of the constants and the noise factors of each set, or why there are none."""
    found = []
    for seed in seeds:
        rng = np.random.default_rng(seed)
        lines = _simulated(campaign, rng)
        try:
            model = _with_priors_redrawn(campaign, rng)
            fit = fit_model(model, lines, policy=campaign.policy, robust=campaign.robust)
        except (CannotDetermine, NotConverged) as failure:
            found.append(str(failure))
            continue
        count = len(fit.constants)
        sigmas = fit.sigmas[:count]
        error = fit.values[:count] - campaign.values[:count]
        found.append((np.divide(error, sigmas, out=np.zeros(count), where=sigmas > 0), fit.noise.factors))
    return found


def _here(campaign: _Campaign, tasks, report):
    total, done, parts = sum(map(len, tasks)), 0, []
    for task in tasks:
        parts.append(_run(campaign, task))
        done += len(task)
        report(done, total)
    return parts


def _elsewhere(campaign: _Campaign, tasks, report, executor: Executor):
    total, done = sum(map(len, tasks)), 0
    futures = [executor.submit(_run, campaign, task) for task in tasks]
    try:
        for future in as_completed(futures):
            future.result()
            done += len(tasks[futures.index(future)])
            report(done, total)
    finally:
        for future in futures:
            future.cancel()
    return [future.result() for future in futures]


def _silent(done: int, total: int) -> None:
    """The report that nobody asked for."""
