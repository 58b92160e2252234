"""Figures of merit from triangles alone."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from dunhamfit.algebra.criteria import aicc, bic, log_likelihood, reduced_chi2
from dunhamfit.algebra.triangle import Triangle
from dunhamfit.fit.noise import Noise
from dunhamfit.fit.record import Statistics


def statistics_of(triangles: Sequence[Triangle], noise: Noise, *, parameters: int, condition: float) -> Statistics:
    """Figures of merit of a fit.

    Parameters
    ----------
    triangles : sequence of Triangle
        One a group of lines, then those of priors, about the solution, with stated uncertainties.
    noise : Noise
    parameters : int
        Free ones.
    condition : float
    """
    count = len(noise.label)
    squares = np.array([item.z @ item.z + item.rss for item in triangles])
    sizes = np.array([item.n for item in triangles])
    factors = np.append(noise.by_group, np.ones(len(triangles) - count))
    data, chi2 = int(sizes.sum()), float(squares.sum())
    log_sigma = float(sum(item.log_sigma for item in triangles) + sizes @ np.log(factors))
    likelihood = log_likelihood(float(np.sum(squares / factors**2)), data, log_sigma)
    counted = parameters + len(noise.factors)
    return Statistics(
        lines=int(sizes[:count].sum()),
        parameters=parameters,
        dof=data - parameters,
        chi2=chi2,
        reduced_chi2=reduced_chi2(chi2, data - parameters),
        condition=condition,
        log_likelihood=likelihood,
        aicc=aicc(likelihood, data, counted),
        bic=bic(likelihood, data, counted),
    )
