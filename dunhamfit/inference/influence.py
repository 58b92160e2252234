r"""What each sigma is made of, and which source determines which constant.

The covariance is a sum over groups of lines, C = sum_g R^-1 H_g R^-T with H_g = R^-T R_g^T R_g R^-1
and sum_g H_g = 1: the term of group g is the variance that the noise of its lines alone brings
(the uncertainty budget of JCGM 100:2008, 5.1.2, with the lines as input quantities). Its share
in C_jj says how much of constant j the group determines: a weighted mean of two sources has
their weights as shares.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import qr

from dunhamfit.algebra.triangle import covariance_factor
from dunhamfit.fit.record import Fit
from dunhamfit.inference.resample import DroppedGroup, labels_by, leave_one_out
from dunhamfit.inference.weighted import weighted_triangles

PRIORS = "priors"


@dataclass(frozen=True, eq=False)
class Influence:
    """Who determines what.

    Attributes
    ----------
    labels : tuple of str
        Sources or bands, and "priors" last if there are any.
    shares : ndarray of float, shape (labels, constants)
        Part of the variance of each constant that each contributes; columns sum to 1, or to 0 for a fixed constant.
    dropped : tuple of DroppedGroup
        The fit without each source or band.
    """

    labels: tuple[str, ...]
    shares: np.ndarray
    dropped: tuple[DroppedGroup, ...]


def influence(fit: Fit, by: str = "source") -> Influence:
    """Shares of sources (or bands) in every constant, and how far each constant moves without them.

    Parameters
    ----------
    fit : Fit
    by : "source" or "band"

    Raises
    ------
    UsageError
        For another `by`, or a fit whose parameters are tied to each other.
    """
    labels, names = labels_by(fit, by)
    weighted = weighted_triangles(fit)
    factor = covariance_factor(weighted.whole.r)
    parts = np.zeros((len(names) + len(weighted.priors), len(fit.values)))
    for label, triangle in zip([*labels, *[len(names)] * len(weighted.priors)], _all(weighted), strict=True):
        # R_g R^-1 R^-T, whose squared columns are what the group adds to each variance.
        parts[label, weighted.free] += ((weighted.shares(triangle) @ factor.T) ** 2).sum(axis=0)
    total = parts.sum(axis=0)
    shares = np.divide(parts, total, out=np.zeros_like(parts), where=total > 0)
    return Influence(
        labels=(*names, *[PRIORS] * len(weighted.priors)),
        shares=shares[:, : len(fit.constants)],
        dropped=leave_one_out(fit, by),
    )


def calibration_share(fit: Fit) -> np.ndarray:
    """The part of each sigma that is due to calibration terms, shape (p,).

    sqrt(C_jj - C_jj(calibration known)), the second being the conditional covariance: what
    sigma would be missing if the offset and scale of every source were known exactly. For a
    calibration term it is the whole sigma.
    """
    calibration = [i for i, item in enumerate(fit.model.parameters) if item.source and fit.sigmas[i] > 0]
    if not calibration:
        return np.zeros(len(fit.values))
    # Given the calibration terms, the part of F within the span of their rows is known.
    span = qr(fit.factor[calibration].T, mode="economic")[0]
    return np.sqrt(((fit.factor @ span) ** 2).sum(axis=1))


def _all(weighted):
    return (*weighted.groups, *weighted.priors)
