"""Every line against a fit: its residual over what it should scatter by.

Used lines have externally studentised residuals, each against the scatter of all the others;
lines left out are compared with their prediction, whose own uncertainty is added. Both
follow Student's distribution (the normal one where the uncertainties are taken as stated) if
the line is as good as the others.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from dunhamfit.algebra.criteria import studentised, two_sided_tail
from dunhamfit.fit.design import Design, build_design, calculate
from dunhamfit.fit.record import Fit
from dunhamfit.lines.line_list import LineList

# A line of higher leverage determines something alone; fewer degrees of freedom leave no others to judge by.
_ALONE, _SEVERAL = 1e-6, 2.0


@dataclass(frozen=True, eq=False)
class Studentised:
    """Columns over all lines of a fit, shape (n_lines,); NaN where a line cannot be judged.

    Attributes
    ----------
    residual : ndarray of float, cm-1
        Observed less calculated.
    sigma : ndarray of float, cm-1
        1 standard uncertainty of the line, noise factor included.
    leverage : ndarray of float
        Share of the line in its own calculated position, 0 to 1; 0 for lines left out.
    t : ndarray of float
        Studentised residual; NaN for a line that alone determines something.
    p : ndarray of float
        Probability of as large a |t| by chance, for one line chosen beforehand.
    """

    residual: np.ndarray
    sigma: np.ndarray
    leverage: np.ndarray
    t: np.ndarray
    p: np.ndarray


def studentise(fit: Fit, others: np.ndarray | None = None) -> Studentised:
    """Judge the used lines of a plain fit, and those of `others` that are not used.

    Parameters
    ----------
    fit : Fit
    others : ndarray of bool, shape (n_lines,), optional
        Of isotopologues that the model knows.
    """
    lines = fit.lines
    factors, degrees = noise_of_lines(fit)
    sigma = lines.sigma * factors
    leverage, t, p = np.zeros(len(lines)), np.full(len(lines), np.nan), np.full(len(lines), np.nan)
    used = fit.design.used
    leverage[used] = np.clip(_variance(fit, fit.design) / sigma[used] ** 2, 0.0, 1.0)
    left_out = np.flatnonzero(others & ~lines.used) if others is not None else used[:0]
    if len(left_out):
        predicted = _variance(fit, _design_of(fit, lines.subset(left_out)))
        t[left_out] = fit.residuals[left_out] / np.sqrt(sigma[left_out] ** 2 + predicted)
    for dof in np.unique(degrees[used]):
        chosen = used[degrees[used] == dof]
        t[chosen] = studentised(fit.residuals[chosen] / sigma[chosen], leverage[chosen], s2=1.0, dof=dof)
        # A line that holds nearly all of the scatter leaves none, to rounding, for the others.
        alone = chosen[np.isnan(t[chosen]) & (leverage[chosen] < 1 - _ALONE)] if dof > _SEVERAL else chosen[:0]
        t[alone] = np.copysign(np.inf, fit.residuals[alone])
        p[chosen] = two_sided_tail(t[chosen], dof - 1) if dof > 1 else np.nan
    for dof in np.unique(degrees[left_out]):
        chosen = left_out[degrees[left_out] == dof]
        p[chosen] = two_sided_tail(t[chosen], dof)
    return Studentised(fit.residuals, sigma, leverage, t, p)


def predicted(fit: Fit, lines: LineList) -> tuple[np.ndarray, np.ndarray]:
    """Calculated positions of any lines and what the fit adds to their uncertainty.

    Parameters
    ----------
    fit : Fit
    lines : LineList
        Of isotopologues that the model knows; sources as in the fit. Positions need only be
        near enough for the calibration terms.

    Returns
    -------
    position, sigma : ndarray of float, shape (n_lines,), cm-1
    """
    lines = replace(lines, exclusion=np.zeros(len(lines)))
    calculated = calculate(fit.model, lines, fit.values)
    return calculated.high, np.sqrt(_variance(fit, _design_of(fit, lines)))


def _design_of(fit: Fit, lines: LineList) -> Design:
    return build_design(fit.model, replace(lines, exclusion=np.zeros(len(lines))))


def _variance(fit: Fit, design: Design) -> np.ndarray:
    """Variance of the calculated position of each line of a design, shape (n_used,), cm-2."""
    rows = design.rows
    count = int(rows.starts[len(design.groups)])
    spread = rows.whitened[:count] @ fit.factor
    return (np.einsum("ij,ij->i", spread, spread) / rows.scale[:count] ** 2)[design.row_of]


def noise_of_lines(fit: Fit) -> tuple[np.ndarray, np.ndarray]:
    """Noise factor of every line and the degrees of freedom it rests on (infinite: taken as stated).

    A line left out has the factor of its group; if no line of that is used, the one of its
    source if that has one only, else 1.
    """
    lines, groups, noise = fit.lines, fit.groups, fit.noise
    factors, degrees = np.ones(len(lines)), np.full(len(lines), np.inf)
    if not len(noise.factors):
        return factors, degrees
    own = np.where(noise.determined, noise.degrees, np.inf)
    for code in np.unique(groups.source):
        labels = np.unique(noise.label[groups.source == code])
        if len(labels) == 1:
            of_source = lines.source == code
            factors[of_source], degrees[of_source] = noise.factors[labels[0]], own[labels[0]]
    columns = ("source", "isotopologue", "v_upper", "v_lower")
    keys = np.stack([np.concatenate([getattr(groups, name), getattr(lines, name)]) for name in columns])
    number = np.unique(keys, axis=1, return_inverse=True)[1].ravel()
    label = np.full(number.max() + 1, -1)
    label[number[: len(groups)]] = noise.label
    found = label[number[len(groups) :]]
    factors[found >= 0], degrees[found >= 0] = noise.factors[found[found >= 0]], own[found[found >= 0]]
    return factors, degrees
