"""The coordinates in which a posterior is sampled, and what they mean.

Free parameters: u = F^-1 (c - c_fit) with the covariance factor F of the fit, so that the
posterior is close to the unit Gaussian. Noise factors: their logarithms. A factor that the
lines could not determine is not sampled; it keeps the value of the fit.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from dunhamfit.errors import UsageError
from dunhamfit.fit.model import Parameter
from dunhamfit.fit.record import Fit


@dataclass(frozen=True, eq=False)
class Frame:
    """Where a fit stands, and which of its numbers are sampled.

    Attributes
    ----------
    parameters : tuple of Parameter
        The free ones, p in number.
    values : ndarray of float, shape (p,)
    factor : ndarray of float, shape (p, p)
        F, covariance F F^T.
    free : ndarray of int, shape (p,)
        Place of each free parameter among all.
    noise_names : tuple of str
        What each sampled noise factor belongs to.
    noise_factors, noise_sigmas : ndarray of float, shape (factors,)
        The sampled noise factors at the fit, and 1 sigma of each.
    noise_degrees : ndarray of float, shape (factors,)
        Effective degrees of freedom that each rests on.
    label : ndarray of int, shape (groups,)
        Index of the sampled factor of each group of lines, -1 where it is held.
    held : ndarray of float, shape (groups,)
        Noise factor of each group at the fit.
    """

    parameters: tuple[Parameter, ...]
    values: np.ndarray
    factor: np.ndarray
    free: np.ndarray
    noise_names: tuple[str, ...]
    noise_factors: np.ndarray
    noise_sigmas: np.ndarray
    noise_degrees: np.ndarray
    label: np.ndarray
    held: np.ndarray

    @property
    def size(self) -> int:
        return len(self.values)

    @property
    def factors(self) -> int:
        return len(self.noise_factors)

    def constants(self, u: np.ndarray) -> np.ndarray:
        """Parameters at u, shape (..., p)."""
        return self.values + u @ self.factor.T


def make_frame(fit: Fit) -> Frame:
    """The coordinates of a fit.

    Raises
    ------
    UsageError
        If the free parameters of the fit are tied to each other, so that they are not linear.
    """
    free = np.flatnonzero(~fit.model.fixed)
    factor = fit.factor[free]
    if factor.shape[0] != factor.shape[1]:
        raise UsageError(
            f"the posterior needs free parameters that are independent of each other; this fit has "
            f"{factor.shape[0]} of them but only {factor.shape[1]} independent directions (relations between "
            "terms). Take the relations out, or fix the terms that they tie"
        )
    noise = fit.noise
    chosen = np.flatnonzero(noise.determined)
    place = np.full(len(noise.factors) + 1, -1)
    place[chosen] = np.arange(len(chosen))
    label = place[noise.label] if len(noise.factors) else np.full(len(fit.groups), -1)
    return Frame(
        parameters=tuple(fit.model.parameters[i] for i in free),
        values=fit.values[free],
        factor=factor,
        free=free,
        noise_names=tuple(noise.names[i] for i in chosen),
        noise_factors=noise.factors[chosen],
        noise_sigmas=noise.sigmas[chosen],
        noise_degrees=noise.degrees[chosen],
        label=label,
        held=noise.by_group,
    )
