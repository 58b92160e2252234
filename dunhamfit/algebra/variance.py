r"""Noise factors of groups of rows by restricted maximum likelihood, from their triangles alone.

The residual variance of group g is f_g^2 sigma^2. Restricted maximum likelihood (REML)
counts the parameters that the groups spend on the fit, so that one group gives
f^2 = chi2/(n - p) exactly. The work is p x p, whatever the number of lines.

With the scaled triangles R_g/f_g stacked and reduced to R, and the leverage matrices
H_g = R^-T R_g^T R_g R^-1 / f_g^2, the restricted log-likelihood

    l = -1/2 [ sum_g n_g ln f_g^2 + 2 log_sigma + chi2(f) + ln det(R^T R) + (n - p) ln 2 pi ]

has, in the log variances t_g = ln f_g^2 and with s_g = rss_g/f_g^2 at the solution,

    dl/dt_g          = 1/2 [ s_g - (n_g - tr H_g) ]
    expected I_gh    = 1/2 [ delta_gh (n_g - 2 tr H_g) + tr(H_g H_h) ]
    observed J_gh    = 1/2 [ delta_gh (s_g + tr H_g) - tr(H_g H_h) ] - u_g . u_h

where u_g = R^-T R_g^T e_g / f_g^2 and e_g is the residual of the group, rotated as its
triangle is. (Patterson and Thompson, Biometrika 58, 545 (1971); Harville, J. Am. Stat.
Assoc. 72, 320 (1977), both from memory; the form on triangles is derived here.)

A few rounds of the fixed point f_g^2 = rss_g/(n_g - tr H_g) come near the maximum from
afar but then crawl. Newton steps with J finish: they converge quadratically where Fisher
scoring with I is only linear, and J costs no more. Where J is indefinite the absolute values
of its eigenvalues keep the step uphill. I gives the uncertainties.

Factors that are estimated make the covariance (R^T R)^-1 of the parameters too small. To
first order in W = I^-1 it lacks

    2 R^-1 [ sum_g W_gg H_g - sum_gh W_gh H_g H_h ] R^-T

(Kenward and Roger, Biometrics 53, 983 (1997), from memory), here called the allowance.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import solve_triangular

from dunhamfit.algebra.triangle import Triangle, merge, reduce_rows
from dunhamfit.errors import NotConverged, UsageError

_FIXED_POINT_ROUNDS = 4
# Longest steps of a log variance, in a round of the fixed point and in one of Newton's.
_LONGEST_JUMP, _LONGEST_STEP = 10.0, 2.0
# Below this step the likelihood is so flat that its rounding, not its fall, would stop the search.
_TRUSTED_STEP = 1e-3
# The last step: Newton squares it, so what is left of a log variance is near 1e-10.
_SETTLED_STEP = 1e-5
# Information below which a direction counts as flat: a log variance uncertain by more than 30.
_FLAT = 1e-3
# A falling factor with fewer degrees of freedom than this has nothing that would stop it.
_COLLAPSED = 0.5
# Variance of ln f^2 at which a factor is as uncertain as it is large.
_VAGUE = 4.0
# A factor below this means residuals at the rounding of the positions, which say nothing of noise.
_SMALLEST_FACTOR = 1e-6


@dataclass(frozen=True, eq=False)
class NoiseFactors:
    """Noise factors and how well they are known.

    Attributes
    ----------
    factors : ndarray of float, shape (G,)
        f_g, by which stated uncertainties are multiplied; 1 where not determined.
    sigmas : ndarray of float, shape (G,)
        Standard uncertainty of each factor, from the expected information; NaN where not determined.
    degrees : ndarray of float, shape (G,)
        Effective degrees of freedom n_g - tr H_g.
    rss : ndarray of float, shape (G,)
        Weighted sum of squares of the residuals at the solution, for uncertainties as stated.
    determined : ndarray of bool, shape (G,)
        False where the group holds too little to tell its noise.
    iterations : int
        Rounds that the search took.
    log_restricted : float
        Restricted log-likelihood reached.
    information : ndarray of float, shape (G, G)
        Expected information of the log variances ln f_g^2.
    allowance : ndarray of float, shape (p, p), units of the parameters squared
        What the uncertainty of the factors adds to the covariance of the parameters,
        positive semi-definite. Small against the covariance where every group has many
        more lines than there are parameters.
    """

    factors: np.ndarray
    sigmas: np.ndarray
    degrees: np.ndarray
    rss: np.ndarray
    determined: np.ndarray
    iterations: int
    log_restricted: float
    information: np.ndarray
    allowance: np.ndarray


def noise_factors(
    triangles, *, labels=None, fixed=(), least_degrees: float = 4.0, max_rounds: int = 100
) -> NoiseFactors:
    """Restricted maximum-likelihood noise factors of groups of rows.

    A factor is not determined, and stays at 1, if its group has fewer than
    `least_degrees` effective degrees of freedom, if it would be uncertain by more
    than itself, or if the residuals vanish.

    Parameters
    ----------
    triangles : sequence of Triangle, length T, all with the same p
        With `fixed` they must determine every parameter: judge the rank first. Their
        bases should be near the solution, or rounding makes the likelihood noisy.
    labels : array_like of int, shape (T,), optional
        Index 0 .. G-1 of the factor of each triangle; by default one each. All zero
        asks for one common factor, whose square is chi2/(n - p) if nothing is fixed.
    fixed : sequence of Triangle
        Rows whose uncertainties are taken as stated, such as priors.
    least_degrees : float
        Smaller groups can fit so well by chance that they get a large weight which no
        error bar accounts for. Where one factor serves all, no weight is at stake and
        1 is enough.
    max_rounds : int

    Returns
    -------
    NoiseFactors

    Raises
    ------
    NotConverged
        `state` holds the factors, degrees, log_restricted and the largest step in a log variance.
    UsageError
        There are no triangles, or `labels` does not number the factors 0 .. G-1.
    """
    stack = _Stack(_grouped(list(triangles), labels), list(fixed))
    active = stack.free.copy()
    point = stack.at(np.zeros(active.size))
    largest = np.inf
    for iteration in range(1, max_rounds + 1):
        if iteration <= _FIXED_POINT_ROUNDS:
            step = np.where(active, point.jump(), 0.0)
            largest = float(np.max(np.abs(step)))
            point = stack.at(point.log_variances + step)
            continue
        step = point.ascent(active)
        largest = float(np.max(np.abs(step)))
        settled = largest < _SETTLED_STEP
        lost = active & point.undetermined(active, least_degrees, settled=settled)
        if np.any(lost):
            active &= ~lost
            point = stack.at(np.where(active, point.log_variances, 0.0))
            continue
        point = stack.climb(point, step)
        if settled:
            return _result(point, stack.free, active, iteration)
    state = {
        "factors": np.exp(point.log_variances[stack.free] / 2),
        "degrees": point.degrees[stack.free],
        "log_restricted": point.log_restricted,
        "largest_step": largest,
    }
    raise NotConverged(
        f"the noise factors have not settled after {max_rounds} rounds (last step {largest:.1e} in a log "
        "variance); let groups with few lines share a factor, or look for one whose residuals vanish",
        state=state,
    )


def restricted_log_likelihood(triangle: Triangle) -> float:
    """Restricted log-likelihood of all rows together, as one square triangle.

    For given noise factors merge the triangles after `scaled`, which enters n_g ln f_g
    into `log_sigma`. A merged triangle holds chi2 at the solution as its `rss`.
    """
    log_det = 2.0 * float(np.sum(np.log(np.abs(np.diag(triangle.r)))))
    free = triangle.n - triangle.parameters
    return -0.5 * (2.0 * triangle.log_sigma + triangle.rss + log_det + free * float(np.log(2.0 * np.pi)))


def _grouped(triangles, labels) -> list[Triangle]:
    """One triangle for each factor."""
    labels = np.arange(len(triangles)) if labels is None else np.asarray(labels)
    found = np.unique(labels)
    counted = found.size > 0 and np.array_equal(found, np.arange(found.size))
    if labels.shape != (len(triangles),) or not counted:
        raise UsageError(
            f"labels must number the factors of the {len(triangles)} triangles 0, 1, 2 ... without a gap "
            f"(got {labels.tolist()})"
        )
    members = [[triangles[i] for i in np.flatnonzero(labels == label)] for label in found]
    return [group[0] if len(group) == 1 else merge(group) for group in members]


class _Stack:
    """The groups, padded to one array; fixed rows come last and are not free."""

    def __init__(self, groups, fixed):
        self.base = groups[0].base
        self.free = np.array([True] * len(groups) + [False] * len(fixed))
        moved = [item.shifted(self.base) for item in (*groups, *fixed)]
        self.r = np.zeros((len(moved), max(item.z.size for item in moved), self.base.size))
        self.z = np.zeros(self.r.shape[:2])
        for i, item in enumerate(moved):
            self.r[i, : item.z.size] = item.r
            self.z[i, : item.z.size] = item.z
        self.rss = np.array([item.rss for item in moved])
        self.lines = np.array([item.n for item in moved])
        self.log_sigma = float(sum(item.log_sigma for item in moved))

    def at(self, log_variances) -> _Point:
        """Likelihood, gradient and information there: one reduction of the scaled triangles."""
        factors = np.exp(log_variances / 2)
        rows = self.r / factors[:, None, None]
        z = self.z / factors[:, None]
        rss = self.rss / factors**2
        flat_rows = rows.reshape(-1, self.base.size)
        whole = reduce_rows(
            flat_rows,
            z.ravel(),
            self.base,
            n=int(self.lines.sum()),
            rss=float(rss.sum()),
            log_sigma=self.log_sigma + float(self.lines @ log_variances) / 2,
        )
        shares = solve_triangular(whole.r, flat_rows.T, trans="T").T.reshape(rows.shape)
        residual = shares @ whole.z - z
        leverage = shares.transpose(0, 2, 1) @ shares
        pull = np.einsum("gip,gi->gp", shares, residual)
        spent = np.trace(leverage, axis1=1, axis2=2)
        flat = leverage.reshape(spent.size, -1)
        overlap = flat @ flat.T
        squares = np.einsum("gi,gi->g", residual, residual) + rss
        return _Point(
            log_variances=log_variances,
            r=whole.r,
            leverage=leverage,
            squares=squares,
            degrees=self.lines - spent,
            expected=(np.diag(self.lines - 2 * spent) + overlap) / 2,
            observed=(np.diag(squares + spent) - overlap) / 2 - pull @ pull.T,
            log_restricted=restricted_log_likelihood(whole),
        )

    def climb(self, point: _Point, step) -> _Point:
        """Take the step, halved as long as the likelihood falls."""
        trial = self.at(point.log_variances + step)
        while trial.log_restricted < point.log_restricted and np.max(np.abs(step)) > _TRUSTED_STEP:
            step = step / 2
            trial = self.at(point.log_variances + step)
        return trial


@dataclass(frozen=True, eq=False)
class _Point:
    """What the module docstring derives, at one set of log variances; `squares` is s_g."""

    log_variances: np.ndarray
    r: np.ndarray
    leverage: np.ndarray
    squares: np.ndarray
    degrees: np.ndarray
    expected: np.ndarray
    observed: np.ndarray
    log_restricted: float

    def jump(self) -> np.ndarray:
        """Step of the fixed point; none for a group that would run away to zero for want of rows."""
        tiny = np.finfo(float).tiny
        jump = np.log(np.maximum(self.squares, tiny) / np.maximum(self.degrees, tiny))
        held = (self.degrees < _COLLAPSED) & (jump < 0)
        return np.where(held, 0.0, np.clip(jump, -_LONGEST_JUMP, _LONGEST_JUMP))

    def ascent(self, active) -> np.ndarray:
        """Newton step of the active log variances, uphill along directions of either curvature."""
        step = np.zeros(active.size)
        if np.any(active):
            values, vectors = np.linalg.eigh(self.observed[np.ix_(active, active)])
            gradient = (self.squares - self.degrees)[active] / 2
            step[active] = vectors @ ((vectors.T @ gradient) / np.maximum(np.abs(values), _FLAT))
        return step * min(1.0, _LONGEST_STEP / max(np.max(np.abs(step)), _LONGEST_STEP))

    def covariance(self, active) -> np.ndarray:
        """Covariance W of the log variances; zero for those that are not estimated."""
        chosen = np.ix_(active, active)
        full = np.zeros_like(self.expected)
        full[chosen] = _bounded_inverse(self.expected[chosen])
        return full

    def allowance(self, active) -> np.ndarray:
        """See the module docstring."""
        covariance = self.covariance(active)
        mixed = np.tensordot(covariance, self.leverage, axes=1)
        spread = np.tensordot(np.diag(covariance), self.leverage, axes=1) - (self.leverage @ mixed).sum(axis=0)
        half = solve_triangular(self.r, spread)
        return 2 * solve_triangular(self.r, half.T)

    def undetermined(self, active, least_degrees, *, settled) -> np.ndarray:
        """Groups to give up; before the search has settled, only those that run away to zero."""
        vanishing = self.log_variances < 2 * np.log(_SMALLEST_FACTOR)
        if not settled:
            return vanishing | (self.degrees < _COLLAPSED) & (self.squares <= self.degrees)
        vague = np.diag(self.covariance(active)) > _VAGUE
        return vanishing | vague | (self.degrees < least_degrees)


def _bounded_inverse(information) -> np.ndarray:
    """Inverse of a small symmetric matrix whose flat directions are held at `_FLAT`."""
    values, vectors = np.linalg.eigh(information)
    return (vectors / np.maximum(values, _FLAT)) @ vectors.T


def _result(point: _Point, free, active, iterations) -> NoiseFactors:
    factors = np.exp(point.log_variances / 2)
    log_sigmas = np.sqrt(np.diag(point.covariance(active))) / 2
    return NoiseFactors(
        factors=factors[free],
        sigmas=np.where(active, factors * log_sigmas, np.nan)[free],
        degrees=point.degrees[free],
        rss=(point.squares * factors**2)[free],
        determined=active[free],
        iterations=iterations,
        log_restricted=point.log_restricted,
        information=point.expected[np.ix_(free, free)],
        allowance=point.allowance(active),
    )
