"""Statistics of a fit, from sums of squares and counts alone.

chi2 is the weighted sum of squares, n the number of lines, k the number of fitted numbers
(parameters, and noise factors where they were estimated). All probabilities come from
scipy.special; scipy.stats would cost a second of import.
"""

from __future__ import annotations

import numpy as np
from scipy.special import chdtrc, ndtr, ndtri, stdtr, stdtrit

from dunhamfit.errors import UsageError

# Leverages are good to some 1e-13: a smaller difference from 1 than this is rounding, not data.
_NOTHING_LEFT = 1e-10


def log_likelihood(chi2: float, n: int, log_sigma: float) -> float:
    """Normal log-likelihood; `log_sigma` is the sum of ln(sigma) over the lines."""
    return -0.5 * (chi2 + n * float(np.log(2 * np.pi))) - log_sigma


def aicc(likelihood: float, n: int, k: int) -> float:
    """Akaike's criterion with the small-sample term; infinite where n - k - 1 is not positive.

    C. M. Hurvich and C.-L. Tsai, Biometrika 76, 297 (1989).
    """
    room = n - k - 1
    return -2 * likelihood + 2 * k + 2 * k * (k + 1) / room if room > 0 else float("inf")


def bic(likelihood: float, n: int, k: int) -> float:
    """Bayesian information criterion. G. Schwarz, Ann. Stat. 6, 461 (1978)."""
    return -2 * likelihood + k * float(np.log(n))


def reduced_chi2(chi2: float, dof: float) -> float:
    """chi2/dof; NaN where nothing is left to judge by."""
    return chi2 / dof if dof > 0 else float("nan")


def chi2_tail(chi2, dof) -> np.ndarray:
    """Probability that chi-square with `dof` degrees of freedom exceeds `chi2`."""
    return chdtrc(dof, chi2)


def two_sided_tail(t, dof: float = np.inf) -> np.ndarray:
    """Probability that Student's t exceeds |t| on either side; normal for infinite `dof`."""
    below = -np.abs(t)
    return 2 * (ndtr(below) if np.isinf(dof) else stdtr(dof, below))


def coverage_factor(level: float, dof: float = np.inf) -> float:
    """Half-width, in standard uncertainties, of the interval that holds `level` of the probability.

    JCGM 100:2008 (GUM), annex G: Student's distribution, normal for infinite `dof`.

    Raises
    ------
    UsageError
        `level` is not between 0 and 1, or `dof` is not positive.
    """
    if not 0 < level < 1:
        raise UsageError(f"the level of an interval must lie between 0 and 1 (got {level})")
    if not dof > 0:
        raise UsageError(f"degrees of freedom must be positive (got {dof})")
    upper = (1 + level) / 2
    return float(ndtri(upper) if np.isinf(dof) else stdtrit(dof, upper))


def studentised(residual, leverage, *, s2: float, dof: float) -> np.ndarray:
    """Externally studentised residuals: each against the scatter of all the others.

    Equal to the t value of an offset given to that line alone, so Student's distribution
    with dof - 1 degrees of freedom holds for a line chosen beforehand. (R. D. Cook and
    S. Weisberg, Residuals and Influence in Regression, 1982, from memory.)

    Parameters
    ----------
    residual : ndarray of float, shape (n,)
        Residuals over their uncertainties.
    leverage : ndarray of float, shape (n,)
        Diagonal of the hat matrix, 0 to 1.
    s2 : float
        Reduced chi-square, chi2/dof.
    dof : float
        Degrees of freedom n - p; infinite for uncertainties known on a scale of sqrt(s2).

    Returns
    -------
    ndarray of float, shape (n,)
        NaN where no residual is left: a line that alone determines a parameter, or too few lines.
    """
    residual, free = np.asarray(residual, dtype=float), 1 - np.asarray(leverage, dtype=float)
    judged = (free > _NOTHING_LEFT) & (s2 > 0)
    internal = residual / np.sqrt(np.where(judged, s2 * free, np.nan))
    if np.isinf(dof):
        return internal
    others = dof - internal**2
    return internal * np.sqrt((dof - 1) / np.where(others > _NOTHING_LEFT * dof, others, np.nan))


def holm(p_values) -> np.ndarray:
    """p values adjusted for their number: reject those below a level to hold the chance of any false alarm.

    S. Holm, Scand. J. Stat. 6, 65 (1979); valid under any dependence of the tests.

    Parameters
    ----------
    p_values : array_like of float, shape (m,)

    Returns
    -------
    ndarray of float, shape (m,), in the order given
    """
    p_values = np.asarray(p_values, dtype=float)
    order = np.argsort(p_values)
    stepped = p_values[order] * np.arange(p_values.size, 0, -1)
    adjusted = np.empty_like(p_values)
    adjusted[order] = np.minimum(np.maximum.accumulate(stepped), 1.0)
    return adjusted
