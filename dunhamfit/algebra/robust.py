r"""Robust losses: how much a residual of u = r/(f sigma) counts in the fit.

A loss replaces the sum of u^2/2 by the sum of rho(u). With psi = rho' and the weight
w = psi/u, its minimum solves a weighted least-squares problem whose weights depend on the
residuals, and is found by iterated reweighting. The scale is the stated uncertainty times
the noise factor of the group, never one estimated from the residuals of all lines.

For standard normal u a robust loss gives weights below 1 to good lines too, so that

    consistency = E[psi u]                   is what the mean of w u^2 becomes instead of 1,
    efficiency  = E[psi']^2 / E[psi^2]       is the variance of least squares over that of the fit.

A noise factor taken from the weighted sum of squares must be divided by sqrt(consistency), or
iterated factors shrink from round to round. (P. J. Huber, Robust Statistics, 1981, from memory.)
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass

import numpy as np
from scipy.special import gammaln, ndtr

from dunhamfit.errors import UsageError

# Normal means by the trapezoidal rule: exact to rounding for smooth functions, to 1e-6 with kinks.
_GRID = np.linspace(-10.0, 10.0, 4001)
_LOG_ROOT_2PI = float(np.log(2 * np.pi)) / 2
_NORMAL = np.exp(-(_GRID**2) / 2) * (_GRID[1] - _GRID[0]) / np.sqrt(2 * np.pi)


def _check_positive(name, value) -> None:
    if not value > 0:
        raise UsageError(f"{name} of a robust loss must be positive (got {value})")


class Loss(ABC):
    """One loss; all methods take standardised residuals of any shape."""

    @abstractmethod
    def rho(self, u) -> np.ndarray:
        """Loss; u^2/2 for small u, up to a factor that the class states."""

    @abstractmethod
    def weight(self, u) -> np.ndarray:
        """w = psi(u)/u, by which 1/sigma^2 is multiplied; between 0 and its value at 0."""

    def psi(self, u) -> np.ndarray:
        """Derivative of `rho`."""
        return self.weight(u) * u

    @abstractmethod
    def slope(self, u) -> np.ndarray:
        """Derivative of `psi`; negative where the influence of a line falls with its size."""

    @property
    @abstractmethod
    def log_norm(self) -> float:
        """ln of the integral of exp(-rho): what makes exp(-rho) the density of an error model."""

    @property
    def consistency(self) -> float:
        """E[psi(u) u] for standard normal u, which equals E[psi'(u)]."""
        return float(_NORMAL @ (self.psi(_GRID) * _GRID))

    @property
    def mean_square(self) -> float:
        """E[psi(u)^2] for standard normal u."""
        return float(_NORMAL @ self.psi(_GRID) ** 2)

    @property
    def efficiency(self) -> float:
        """Asymptotic efficiency against least squares where the noise is normal."""
        return self.consistency**2 / self.mean_square


@dataclass(frozen=True)
class Plain(Loss):
    """Least squares."""

    def rho(self, u):
        return np.square(u) / 2

    def weight(self, u):
        return np.ones_like(u, dtype=float)

    def slope(self, u):
        return np.ones_like(u, dtype=float)

    @property
    def log_norm(self):
        return _LOG_ROOT_2PI


@dataclass(frozen=True)
class Watson(Loss):
    """w = sigma^2/(sigma^2 + alpha r^2): the influence of far lines falls to zero.

    J. K. G. Watson, J. Mol. Spectrosc. 219, 326 (2003), from memory, with alpha = 1/3.
    It differs from the Student loss of 1/alpha degrees of freedom by a constant factor.
    """

    alpha: float = 1 / 3

    def __post_init__(self):
        _check_positive("alpha", self.alpha)

    def rho(self, u):
        return np.log1p(self.alpha * np.square(u)) / (2 * self.alpha)

    def weight(self, u):
        return 1 / (1 + self.alpha * np.square(u))

    def slope(self, u):
        share = self.alpha * np.square(u)
        return (1 - share) / (1 + share) ** 2

    @property
    def log_norm(self):
        power = 1 / (2 * self.alpha)
        if power <= 0.5:
            return np.inf  # the tails are too heavy for a density
        return float((np.log(np.pi / self.alpha)) / 2 + gammaln(power - 0.5) - gammaln(power))


@dataclass(frozen=True)
class Huber(Loss):
    """Quadratic up to k, linear beyond: the influence of far lines is bounded.

    P. J. Huber, Ann. Math. Stat. 35, 73 (1964). k = 1.345 gives an efficiency of 95 %.
    """

    k: float = 1.345

    def __post_init__(self):
        _check_positive("k", self.k)

    def rho(self, u):
        size = np.abs(u)
        inner = np.minimum(size, self.k)
        return inner * (size - inner / 2)

    def weight(self, u):
        size = np.abs(np.asarray(u, dtype=float))
        return np.divide(self.k, size, out=np.ones_like(size), where=size > self.k)

    def slope(self, u):
        return (np.abs(u) <= self.k).astype(float)

    @property
    def log_norm(self):
        middle = _LOG_ROOT_2PI + np.log(2 * ndtr(self.k) - 1)
        return float(np.logaddexp(middle, np.log(2 / self.k) - self.k**2 / 2))


@dataclass(frozen=True)
class Student(Loss):
    """Minus the logarithm of Student's density, so the fit is a maximum-likelihood one.

    K. L. Lange, R. J. A. Little and J. M. G. Taylor, J. Am. Stat. Assoc. 84, 881 (1989), from
    memory; they suggest nu = 4 where the data cannot tell. The weight at 0 is (nu + 1)/nu.
    """

    nu: float = 4.0

    def __post_init__(self):
        _check_positive("nu", self.nu)

    def rho(self, u):
        return (self.nu + 1) / 2 * np.log1p(np.square(u) / self.nu)

    def weight(self, u):
        return (self.nu + 1) / (self.nu + np.square(u))

    def slope(self, u):
        square = np.square(u)
        return (self.nu + 1) * (self.nu - square) / (self.nu + square) ** 2

    @property
    def log_norm(self):
        return float(np.log(np.pi * self.nu) / 2 + gammaln(self.nu / 2) - gammaln((self.nu + 1) / 2))


LOSSES = {"none": Plain(), "watson": Watson(), "huber": Huber(), "student": Student()}


def loss(name: str) -> Loss:
    """The loss of that name with its usual threshold; UsageError lists the names."""
    if name not in LOSSES:
        raise UsageError(f"robust loss {name!r} is not known; use one of {', '.join(LOSSES)}")
    return LOSSES[name]
