"""Sampling the posterior of a fit: long enough by default, as long as asked for, or further than before."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from dunhamfit.errors import UsageError
from dunhamfit.fit.design import build_design
from dunhamfit.fit.record import Fit
from dunhamfit.inference import description
from dunhamfit.inference.chain import Target, run_chain, start_chain
from dunhamfit.inference.chain_state import ChainState, seeded
from dunhamfit.inference.convergence import steps_wanted
from dunhamfit.inference.error_models import LineErrors, OutlierErrors, StudentErrors
from dunhamfit.inference.frame import Frame, make_frame
from dunhamfit.inference.identity import check_same, identity
from dunhamfit.inference.marginal import MarginalTarget
from dunhamfit.inference.mixture import MixtureTarget
from dunhamfit.inference.posterior import Posterior, join

ERROR_MODELS = ("gaussian", "student", "outliers")
# Far wider than any uncertainty is misjudged; the fit does not look for factors beyond it either.
FACTOR_RANGE = (1e-6, 1e6)
# What the default length aims at, for every quantity.
TARGET_ESS = 1000.0
_ENSEMBLES = 4
# Steps handed over at a time; no number depends on it.
_BLOCK = 50
# Steps before the first judgement of the length, and the most that the default takes.
_FIRST_STEPS, _MOST_STEPS = 120, 5000
# Draws from which the probability of being bad is averaged, at the most.
_MOST_FOR_LINES = 2000


def sample(
    fit: Fit,
    *,
    seed: int | None = None,
    total: int | None = None,
    more: int | None = None,
    start: Posterior | None = None,
    model: str = "gaussian",
    factor_range: tuple[float, float] = FACTOR_RANGE,
    force: bool = False,
    progress: Callable[[int, int], None] | None = None,
    on_block: Callable[[Posterior], None] | None = None,
) -> Posterior:
    """Sample the posterior of the parameters and noise factors of a fit.

    The length of the chain is `total` draws, or `more` draws beyond those of `start`. If
    neither is given it goes on until every quantity has an effective sample size of
    `TARGET_ESS`, the chain is 50 autocorrelation times long and the ensembles agree, or
    gives up after a great many steps: ask `Posterior.converged`. Numbers of draws are
    rounded up to whole steps of all walkers.

    An interrupt (KeyboardInterrupt) ends it early: what is finished is returned, marked `interrupted`.

    Parameters
    ----------
    fit : Fit
    seed : int, optional
        Drawn from the system if not given; the result holds it. A chain that goes on keeps its own.
    total, more : int, optional
        Draws; `more` needs `start`.
    start : Posterior, optional
        Go on with it: the result equals that of an uninterrupted run bit for bit.
    model : one of `ERROR_MODELS`
    factor_range : tuple of float
        Lowest and highest noise factor that the prior allows.
    force : bool
        Give quantiles even if the chain is too short; they are stamped.
    progress : callable, optional
        Called with draws done and draws wanted.
    on_block : callable, optional
        Called with every finished piece of the chain, as a Posterior that holds this piece alone, so that it
        can be stored; `dunhamfit.inference.posterior.join` makes one of `start` and all pieces.

    Returns
    -------
    Posterior

    Raises
    ------
    UsageError
        If `start` belongs to other lines, terms or another error model, the call contradicts itself, the fit
        has relations between terms, or Gaussian errors are asked for a robust fit.
    """
    _check(model, seed=seed, total=total, more=more, start=start, factor_range=factor_range)
    setup = _set_up(fit, model, factor_range)
    posterior = _begin(setup, seed) if start is None else _continue(setup, start)
    posterior = replace(posterior, forced=force, bad_probability=None)
    run = _Run(setup, posterior, progress or _ignore, on_block or _ignore)
    return run.until(total, more)


@dataclass(frozen=True, eq=False)
class _Setup:
    """What is sampled; no target where the posterior is exact."""

    fit: Fit
    model: str
    factor_range: tuple[float, float]
    frame: Frame
    errors: LineErrors | None
    target: Target | None

    @property
    def size(self) -> int:
        return self.target.size if self.target else self.frame.size


def _check(model, *, seed, total, more, start, factor_range) -> None:
    if model not in ERROR_MODELS:
        raise UsageError(f"error model '{model}' is not known; use one of {', '.join(ERROR_MODELS)}")
    if total is not None and more is not None:
        raise UsageError("give either the total number of draws or how many more, not both")
    for name, number in (("total", total), ("more", more)):
        if number is not None and number < 1:
            raise UsageError(f"'{name}' must be at least 1 draw (got {number})")
    if more is not None and start is None:
        raise UsageError("there is no stored posterior that 'more' could add to; ask for a total")
    if start is not None and seed not in (None, start.seed):
        raise UsageError(f"the stored posterior was started with seed {start.seed} and goes on with it (got {seed})")
    if seed is not None and not 0 <= seed < 2**63:
        raise UsageError(f"the seed must be between 0 and 2^63 - 1 (got {seed})")
    if not 0 < factor_range[0] < factor_range[1]:
        raise UsageError(f"the range of noise factors must be two positive numbers in order (got {factor_range})")


def _set_up(fit: Fit, model: str, factor_range: tuple[float, float]) -> _Setup:
    frame = make_frame(fit)
    errors, target = None, None
    if model == "gaussian":
        if fit.robust != "none":
            raise UsageError(
                f"this fit is robust (loss '{fit.robust}'): it does not take its errors for Gaussian, and Gaussian "
                "errors would lose what it guards against. Sample with the error model 'student' or 'outliers', or "
                "fit without a robust loss"
            )
        if frame.factors:
            target = MarginalTarget(fit.triangles, frame, factor_range)
    else:
        errors = StudentErrors() if model == "student" else OutlierErrors()
        design = fit.design if fit.line_weights is None else build_design(fit.model, fit.lines)
        target = MixtureTarget(fit, design, frame, errors, factor_range)
    return _Setup(fit, model, factor_range, frame, errors, target)


def _begin(setup: _Setup, seed: int | None) -> Posterior:
    seed = int(np.random.SeedSequence().generate_state(1)[0]) if seed is None else int(seed)
    if setup.target:
        state = start_chain(setup.target, seed=seed, ensembles=_ENSEMBLES)
    else:
        random = seeded(seed, 1)[0].get_state()
        state = ChainState.of(np.empty((1, 1, 0)), np.empty((1, 1)) * np.nan, [random])
    exact = setup.target is None
    return Posterior(
        error_model=setup.model,
        quantities=description.quantities(setup.frame, setup.errors),
        chain=np.empty((0, *state.coords.shape[:2], setup.size)),
        state=state,
        seed=seed,
        warm_up=0 if exact else setup.target.warm_up,
        accepted=np.zeros(len(state.coords), dtype=np.int64),
        identity=_identity(setup),
        factor_range=tuple(map(float, setup.factor_range)),
        priors=description.priors(setup.fit, setup.frame, setup.errors, setup.factor_range),
        notes=description.notes(setup.fit, setup.frame, exact=exact),
        exact=exact,
    )


def _continue(setup: _Setup, start: Posterior) -> Posterior:
    check_same(dict(start.identity), _identity(setup))
    return start


def _identity(setup: _Setup) -> dict[str, str]:
    return identity(setup.fit, error_model=setup.model, factor_range=setup.factor_range)


class _Run:
    """One call of `sample` on its way."""

    def __init__(self, setup: _Setup, posterior: Posterior, progress, on_block):
        self.setup = setup
        self.pieces = [posterior]
        self.steps = len(posterior.chain)
        self.at_once = int(np.prod(posterior.chain.shape[1:3]))
        self.progress = progress
        self.on_block = on_block

    def until(self, total: int | None, more: int | None) -> Posterior:
        """Go on as far as is asked for."""
        interrupted = False
        try:
            if total is not None:
                self.extend(-(-total // self.at_once))
            elif more is not None:
                self.extend(self.steps - (-more // self.at_once))
            elif self.setup.target is None:
                self.extend(int(TARGET_ESS))
            else:
                self.settle()
        except KeyboardInterrupt:
            if not self.steps:
                raise
            interrupted = True
        return replace(self.joined(), interrupted=interrupted, bad_probability=self.bad_probability())

    def settle(self) -> None:
        """Extend the chain until it says enough."""
        wanted = max(_FIRST_STEPS, self.steps)
        while True:
            self.extend(wanted)
            posterior = self.joined()
            found = posterior.diagnostics
            if (found.converged and found.ess.min() >= TARGET_ESS) or self.steps >= _MOST_STEPS:
                return
            needed = posterior.discarded + steps_wanted(found.tau, ess=TARGET_ESS, walkers=self.at_once)
            wanted = min(max(int(1.1 * needed), self.steps + _BLOCK), 3 * self.steps, _MOST_STEPS)

    def extend(self, steps: int) -> None:
        """Go on until the chain has this many steps."""
        while self.steps < steps:
            self.progress(self.steps * self.at_once, steps * self.at_once)
            piece = self.piece(min(_BLOCK, steps - self.steps))
            self.pieces.append(piece)
            self.steps += len(piece.chain)
            self.on_block(piece)
        self.progress(self.steps * self.at_once, steps * self.at_once)

    def piece(self, steps: int) -> Posterior:
        last = self.pieces[-1]
        target = self.setup.target
        if target is None:
            draws, state = _independent_draws(self.setup.frame, last.state, steps)
            return replace(last, chain=draws, state=state)
        block = run_chain(target, last.state, steps=steps)
        return replace(last, chain=target.natural(block.draws), state=block.state, accepted=block.accepted)

    def joined(self) -> Posterior:
        self.pieces = [join(self.pieces)]
        return self.pieces[0]

    def bad_probability(self) -> np.ndarray | None:
        if not isinstance(self.setup.errors, OutlierErrors):
            return None
        return _bad_probability(self.setup.target, self.setup.errors, self.joined())


def _independent_draws(frame: Frame, state: ChainState, steps: int) -> tuple[np.ndarray, ChainState]:
    """Independent draws from the Gaussian of the fit, and the state after them."""
    random = state.generator(0)
    draws = frame.constants(random.standard_normal((steps, 1, 1, frame.size)))
    return draws, ChainState.of(state.coords, state.log_prob, [random.get_state()])


def _bad_probability(target: MixtureTarget, errors: OutlierErrors, posterior: Posterior) -> np.ndarray:
    """Probability that each line is bad, averaged over evenly spaced draws, shape (n_lines,)."""
    flat = posterior.kept.reshape(-1, target.size)
    chosen = np.unique(np.linspace(0, len(flat) - 1, _MOST_FOR_LINES).astype(int))
    coords = target.coords(flat[chosen])
    return target.by_line(np.mean([errors.probability_bad(*target.reduced(row[None]))[0] for row in coords], axis=0))


def _ignore(*_) -> None:
    """A report that nobody wants."""
