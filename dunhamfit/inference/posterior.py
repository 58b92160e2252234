"""The posterior of a fit as draws: what was sampled, from where it can go on, and how far it can be trusted."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from types import MappingProxyType

import numpy as np
from scipy.special import ndtri

from dunhamfit.errors import NotConverged, UsageError
from dunhamfit.inference.chain_state import ChainState
from dunhamfit.inference.convergence import LEAST_LENGTH, Diagnostics, diagnose, steps_to_discard

QUANTILES = (0.16, 0.50, 0.84)


@dataclass(frozen=True)
class Quantity:
    """One sampled number.

    Attributes
    ----------
    name : str
        Such as `Y10`, `offset[furnace]`, `factor[furnace]`, `wing`.
    kind : "term", "breakdown", "offset", "scale", "noise factor" or "error model"
    unit : str
    fitted, sigma : float
        Value and 1 sigma of the fit; NaN for the parameters of the error model.
    """

    name: str
    kind: str
    unit: str
    fitted: float = float("nan")
    sigma: float = float("nan")


@dataclass(frozen=True)
class Summary:
    """One sampled number in figures.

    Attributes
    ----------
    quantity : Quantity
    mean, sd : float
    quantiles : tuple of float or None
        At `QUANTILES`; None where the chain is too short for them.
    ess, mcse, tau : float
        Effective sample size, Monte Carlo standard error of the mean, autocorrelation time in steps.
    disagreement : float
        Between ensembles, see `dunhamfit.inference.convergence`; NaN without a chain.
    """

    quantity: Quantity
    mean: float
    sd: float
    quantiles: tuple[float, ...] | None
    ess: float
    mcse: float
    tau: float
    disagreement: float


@dataclass(frozen=True, eq=False)
class Posterior:
    """Draws from the posterior of a fit. Plain arrays and texts: it can be stored and gone on with.

    Attributes
    ----------
    error_model : "gaussian", "student" or "outliers"
    quantities : tuple of Quantity
        q in number.
    chain : ndarray of float, shape (steps, ensembles, walkers, q)
        In the units of the quantities.
    state : ChainState
        From which the chain goes on.
    seed : int
    warm_up : int
        Steps before the first one of `chain`, which were not kept.
    accepted : ndarray of int, shape (ensembles,)
        Proposals accepted since the warm-up.
    identity : mapping from text to digest
        What the chain was made for, see `dunhamfit.inference.identity`.
    factor_range : tuple of float
        Lowest and highest noise factor of the prior.
    priors : tuple of str
        The priors in words.
    notes : tuple of str
        What a reader must know: parameters that are held, an analytic posterior that is exact.
    exact : bool
        The posterior is the Gaussian of the fit; the draws are independent and come straight from it.
    forced : bool
        Quantiles are wanted even where the chain is too short for them.
    interrupted : bool
        The sampling was stopped before it reached what was asked for.
    bad_probability : ndarray of float, shape (n_lines,), or None
        Probability that each line is bad, NaN for excluded lines; None but for the model "outliers".
    """

    error_model: str
    quantities: tuple[Quantity, ...]
    chain: np.ndarray
    state: ChainState
    seed: int
    warm_up: int
    accepted: np.ndarray
    identity: Mapping[str, str]
    factor_range: tuple[float, float]
    priors: tuple[str, ...]
    notes: tuple[str, ...] = ()
    exact: bool = False
    forced: bool = False
    interrupted: bool = False
    bad_probability: np.ndarray | None = None

    def __post_init__(self):
        self.chain.flags.writeable = False

    @property
    def names(self) -> tuple[str, ...]:
        return tuple(item.name for item in self.quantities)

    @property
    def total(self) -> int:
        """Number of draws, discarded ones included."""
        return int(np.prod(self.chain.shape[:3]))

    @cached_property
    def discarded(self) -> int:
        """Steps at the start of the chain that are left out because they may remember it."""
        if self.exact or len(self.chain) < 2:
            return 0
        return steps_to_discard(self.chain, self.warm_up)

    @cached_property
    def kept(self) -> np.ndarray:
        """The chain without discarded steps, shape (steps, ensembles, walkers, q)."""
        return self.chain[self.discarded :]

    @cached_property
    def draws(self) -> Mapping[str, np.ndarray]:
        """Draws of each quantity by name, shape (n_draws,), joint over the quantities."""
        flat = self.kept.reshape(-1, len(self.quantities))
        return MappingProxyType({name: flat[:, index] for index, name in enumerate(self.names)})

    @cached_property
    def diagnostics(self) -> Diagnostics:
        """Autocorrelation, effective sample size, Monte Carlo standard errors, agreement of ensembles."""
        if self.exact:
            return _independent(self.kept)
        return diagnose(self.kept)

    @property
    def converged(self) -> bool:
        """Long enough, and independently seeded ensembles agree; always so for an exact posterior."""
        return self.exact or self.diagnostics.converged

    @property
    def stamp(self) -> str:
        """What is wrong with the chain, in words; empty if nothing is."""
        if self.converged:
            return ""
        found = self.diagnostics
        faults = []
        if found.length < LEAST_LENGTH:
            faults.append(
                f"the chain is {found.length:.3g} autocorrelation times long and {LEAST_LENGTH:.0f} are needed"
            )
        if not found.agree:
            worst = int(np.argmax(found.disagreement))
            faults.append(
                f"independently seeded ensembles disagree on {self.names[worst]} by "
                f"{found.disagreement[worst]:.2g} times what chance explains"
            )
        verdict = "quantiles were forced and are not to be trusted" if self.forced else "no quantile is given"
        return f"NOT CONVERGED: {' and '.join(faults)}; {verdict}"

    def index(self, name: str) -> int:
        """Place of a quantity; UsageError if there is none of that name."""
        if name not in self.names:
            raise UsageError(f"'{name}' was not sampled; there are {', '.join(self.names)}")
        return self.names.index(name)

    def quantile(self, name: str, levels) -> np.ndarray:
        """Quantiles of one quantity.

        Parameters
        ----------
        name : str
        levels : array_like of float
            Between 0 and 1.

        Raises
        ------
        NotConverged
            If the chain is too short and they were not forced.
        """
        place = self.index(name)
        if not (self.converged or self.forced):
            raise NotConverged(
                self.stamp + ". Sample more, or force it", state={"length": self.diagnostics.length}
            )
        if self.exact:
            quantity = self.quantities[place]
            return quantity.fitted + quantity.sigma * ndtri(np.asarray(levels, dtype=float))
        return np.quantile(self.draws[name], levels)

    def covariance(self, names=None) -> np.ndarray:
        """Covariance of the draws of some quantities, by default of all, shape (names, names)."""
        chosen = [self.index(name) for name in (self.names if names is None else names)]
        flat = self.kept.reshape(-1, len(self.quantities))[:, chosen]
        return np.atleast_2d(np.cov(flat, rowvar=False))

    def summary(self) -> tuple[Summary, ...]:
        """Every quantity in figures; those of an exact posterior are not subject to Monte Carlo error."""
        found = self.diagnostics
        sure = self.converged or self.forced
        rows = []
        for place, item in enumerate(self.quantities):
            draws = self.draws[item.name]
            rows.append(
                Summary(
                    quantity=item,
                    mean=item.fitted if self.exact else float(draws.mean()),
                    sd=item.sigma if self.exact else float(draws.std(ddof=1)),
                    quantiles=tuple(map(float, self.quantile(item.name, QUANTILES))) if sure else None,
                    ess=float(found.ess[place]),
                    mcse=float(found.mcse[place]),
                    tau=float(found.tau[place]),
                    disagreement=float(found.disagreement[place]),
                )
            )
        return tuple(rows)


def join(pieces: Sequence[Posterior]) -> Posterior:
    """One posterior from pieces of one chain, in order.

    What is known of single lines has to be worked out anew: `dunhamfit.inference.sampling.sample` does.
    """
    last = pieces[-1]
    if len(pieces) == 1:
        return last
    return replace(
        last,
        chain=np.concatenate([piece.chain for piece in pieces]),
        accepted=np.sum([piece.accepted for piece in pieces], axis=0),
        bad_probability=None,
    )


def _independent(draws: np.ndarray) -> Diagnostics:
    """Diagnostics of independent draws from a posterior that is known exactly."""
    count = draws.shape[-1]
    total = int(np.prod(draws.shape[:3]))
    return Diagnostics(
        tau=np.ones(count),
        ess=np.full(count, float(total)),
        mcse=np.zeros(count),
        disagreement=np.full(count, np.nan),
        length=float(len(draws)),
        agree=True,
    )
