r"""How many degrees of freedom each error bar rests on, where noise factors were estimated.

The variance C_jj = sum_g v_g of constant j, v_g = (R^-1 H_g R^-T)_jj from the lines of noise
factor g, is as uncertain as the factors are: with W the covariance of the log variances
ln f_g^2, var C_jj = v^T W v to first order. A scaled chi-square with the same mean and
variance has

    d_j = 2 C_jj^2 / v^T W v

degrees of freedom, and Student's factor with d_j makes the interval (F. E. Satterthwaite,
Biometrics Bull. 2, 110 (1946); JCGM 100:2008, annex G). One common factor gives d = n - p.
"""

from __future__ import annotations

import numpy as np
from scipy.linalg import solve_triangular

from dunhamfit.algebra.triangle import covariance_factor
from dunhamfit.fit.record import Fit
from dunhamfit.inference.weighted import weighted_triangles


def effective_degrees(fit: Fit) -> np.ndarray:
    """Degrees of freedom of the sigma of every parameter, shape (p,).

    Infinite where sigma rests on no estimated factor: policy "stated", priors, fixed parameters.

    Raises
    ------
    UsageError
        For a fit whose parameters are tied to each other.
    """
    weighted = weighted_triangles(fit)
    degrees = np.full(len(fit.values), np.inf)
    known = np.flatnonzero(fit.noise.determined)
    if not len(known):
        return degrees
    factor = covariance_factor(weighted.whole.r)
    leverage = np.zeros((len(known), len(factor), len(factor)))
    lines = np.zeros(len(known))
    for label, triangle in zip(fit.noise.label, weighted.groups, strict=True):
        for place in np.flatnonzero(known == label):
            share = weighted.shares(triangle)
            leverage[place] += share.T @ share
            lines[place] += triangle.n
    parts = np.einsum("pi,gij,pj->gp", factor, leverage, factor)
    spent = np.trace(leverage, axis1=1, axis2=2)
    flat = leverage.reshape(len(known), -1)
    information = (np.diag(lines - 2 * spent) + flat @ flat.T) / 2
    half = solve_triangular(np.linalg.cholesky(information), parts, lower=True)
    variance = (factor**2).sum(axis=1)
    spread = (half**2).sum(axis=0)
    degrees[weighted.free] = np.divide(2 * variance**2, spread, out=np.full_like(spread, np.inf), where=spread > 0)
    return degrees
