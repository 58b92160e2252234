r"""Posterior under Gaussian errors: noise factors by a chain, parameters exactly.

With the Gram matrices K_l of the groups that share factor f_l and K_0 of everything that
is held (priors, groups without a factor of their own), the parameters integrate out:

    p(f | lines) ~ prod_l f_l^-n_l  *  integral exp(-|r - V u|^2 / 2) du,   K = K_0 + sum_l K_l / f_l^2

with p(ln f) uniform, and p(u | f, lines) is the Gaussian of K. The chain runs over the
noise factors alone; each of its samples gets one draw of the parameters. Conversely,
given u the factors are independent, S_l(u) / f_l^2 ~ chi-square(n_l) with S_l the sum of
squares of the lines of factor l (A. Gelman et al., Bayesian Data Analysis, 3rd ed.,
section 14.2, from memory).

Two moves take turns at random. One proposes all factors afresh, knowing nothing of where
the walker stands, and accepts by the marginal posterior; it forgets within a few steps, but
can wait long where a group is small and its factor far from the most likely. The other goes
from factors to u and back by their exact conditional laws; it never waits.
"""

from __future__ import annotations

from dataclasses import dataclass

import emcee
import numpy as np

from dunhamfit.algebra.triangle import Triangle
from dunhamfit.inference import quadratic
from dunhamfit.inference.frame import Frame
from dunhamfit.inference.proposal import InverseChiSquare, draw_log_factors


@dataclass(frozen=True, eq=False)
class Grams:
    """Gram matrices in the coordinates of a frame.

    Attributes
    ----------
    sampled : ndarray of float, shape (factors, p + 1, p + 1)
        Of the lines of each sampled factor, uncertainties as stated.
    lines : ndarray of int, shape (factors,)
    held : ndarray of float, shape (p + 1, p + 1)
        Of everything else.
    """

    sampled: np.ndarray
    lines: np.ndarray
    held: np.ndarray


def make_grams(triangles: tuple[Triangle, ...], frame: Frame) -> Grams:
    """Gram matrices of triangles of all parameters about the values of the fit.

    Parameters
    ----------
    triangles : tuple of Triangle
        One a group of lines, then that of the priors, if there are any.
    frame : Frame
    """
    held = prior_gram(triangles, frame)
    sampled = np.zeros((frame.factors, *held.shape))
    lines = np.zeros(frame.factors, dtype=np.int64)
    for label, factor, triangle in zip(frame.label, frame.held, triangles, strict=False):
        whole = _gram_of(triangle, frame)
        if label >= 0:
            sampled[label] += whole
            lines[label] += triangle.n
        else:
            held += whole / factor**2
    return Grams(sampled, lines, held)


def prior_gram(triangles: tuple[Triangle, ...], frame: Frame) -> np.ndarray:
    """Gram matrix of the priors, zero if there are none; arguments of `make_grams`."""
    whole = np.zeros((frame.size + 1, frame.size + 1))
    for triangle in triangles[len(frame.label) :]:
        whole += _gram_of(triangle, frame)
    return whole


def _gram_of(triangle: Triangle, frame: Frame) -> np.ndarray:
    whole = quadratic.gram(triangle.r[:, frame.free] @ frame.factor, triangle.z)
    whole[-1, -1] += triangle.rss
    return whole


class MarginalTarget:
    """Noise factors with the parameters integrated out; coordinates u (drawn back), then ln f.

    Parameters
    ----------
    triangles : tuple of Triangle
        See `make_grams`.
    frame : Frame
        With at least one sampled factor.
    factor_range : tuple of float
        Lowest and highest noise factor that the prior allows.
    """

    walkers = 16
    # The start is close to the posterior already; the chain forgets it within a few steps.
    warm_up = 20

    def __init__(self, triangles: tuple[Triangle, ...], frame: Frame, factor_range: tuple[float, float]):
        self.frame = frame
        self.grams = make_grams(triangles, frame)
        self.size = frame.size + frame.factors
        self.bounds = np.log(factor_range)
        self._flat = self.grams.sampled.reshape(frame.factors, -1)
        self.proposal = InverseChiSquare(squares=self.grams.sampled[:, -1, -1], degrees=frame.noise_degrees)

    def factorised(self, log_factors: np.ndarray) -> np.ndarray:
        """Cholesky factors at each set of noise factors, shape (w, p + 1, p + 1)."""
        weighted = np.exp(-2.0 * log_factors) @ self._flat
        return quadratic.factorise(weighted.reshape(-1, *self.grams.held.shape) + self.grams.held)

    def log_prob(self, coords: np.ndarray) -> np.ndarray:
        """Log marginal posterior of ln f, shape (w,); the u among the coordinates plays no part."""
        log_factors = coords[:, self.frame.size :]
        inside = np.all((log_factors >= self.bounds[0]) & (log_factors <= self.bounds[1]), axis=1)
        value = np.full(len(coords), -np.inf)
        if np.any(inside):
            kept = log_factors[inside]
            value[inside] = quadratic.log_integral(self.factorised(kept)) - kept @ self.grams.lines
        return value

    def moves(self) -> list[emcee.moves.Move]:
        return [_ProposeAll(self), _ThroughConstants(self)]

    def start(self, random: np.random.RandomState) -> np.ndarray:
        log_factors = np.clip(self.proposal.draw(self.walkers, random), *self.bounds)
        return np.append(quadratic.draw(self.factorised(log_factors), random), log_factors, axis=1)

    def natural(self, coords: np.ndarray) -> np.ndarray:
        size = self.frame.size
        return np.concatenate([self.frame.constants(coords[..., :size]), np.exp(coords[..., size:])], axis=-1)


class _ProposeAll(emcee.moves.MHMove):
    """Metropolis-Hastings over all noise factors at once, then a draw of u for every walker."""

    def __init__(self, target: MarginalTarget):
        self._target = target
        super().__init__(self._proposed, ndim=target.size)

    def _proposed(self, coords: np.ndarray, random: np.random.RandomState) -> tuple[np.ndarray, np.ndarray]:
        size = self._target.frame.size
        log_factors, ratio = self._target.proposal.propose(coords[:, size:], random)
        return np.append(coords[:, :size], log_factors, axis=1), ratio

    def propose(self, model, state):
        state, accepted = super().propose(model, state)
        size = self._target.frame.size
        state.coords[:, :size] = quadratic.draw(self._target.factorised(state.coords[:, size:]), model.random)
        return state, accepted


class _ThroughConstants(emcee.moves.Move):
    """Noise factors given u, then u given the noise factors, both drawn exactly."""

    def __init__(self, target: MarginalTarget):
        self._target = target

    def propose(self, model, state):
        target, size = self._target, self._target.frame.size
        squares = quadratic.sum_of_squares(target.grams.sampled, state.coords[:, :size])
        log_factors = state.coords[:, size:]
        log_factors[:] = draw_log_factors(squares, target.grams.lines, log_factors, target.bounds, model.random)
        factorised = target.factorised(log_factors)
        state.coords[:, :size] = quadratic.draw(factorised, model.random)
        state.log_prob[:] = quadratic.log_integral(factorised) - log_factors @ target.grams.lines
        return state, np.ones(len(log_factors), dtype=bool)
