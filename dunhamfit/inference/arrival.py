r"""New lines against the constants of an earlier fit, before they are merged.

With F F^T the covariance of the old fit, c = c_old + F s, and t the calibration terms that the
new source brings, the new lines agree with the old constants as well as

    chi2 = min over s, t of |(r - A F s - D t)/sigma|^2 + |s|^2 + |t/prior|^2

says, with r the residuals of the prediction. It equals r^T (S + A C A^T + ...)^-1 r, with the full
covariance, and follows a chi-square law with as many degrees of freedom as there are lines, less
the calibration terms without a prior: the predictive distribution of the new lines (A. Gelman
et al., Bayesian Data Analysis, 3rd ed., 2013, from memory).

A shift that all new lines share is one direction among hundreds, and would drown in that sum. The
verdict therefore rests on two parts of it that are independent if the lines agree: the square of
a shared offset over its sigma, and the rest. Each is tested at 1 - sqrt(1 - 5 %), so that both
together reject lines that agree in 5 % of all cases.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from scipy.linalg import qr
from scipy.special import chdtrc, erfc

from dunhamfit.algebra.rank import SINGULAR_BELOW
from dunhamfit.errors import UsageError
from dunhamfit.fit.design import build_design
from dunhamfit.fit.record import Fit
from dunhamfit.fit.update import extended_model, lines_for
from dunhamfit.lines.line_list import LineList

LEVEL = 0.05
_LEVEL_OF_PART = 1 - math.sqrt(1 - LEVEL)
# To leave out more lines than this is no explanation.
_FEW, _MOST = 0.1, 25
# Part of the variance of a line, or of a shift, below which the unknowns explain all of it.
_NOTHING_LEFT = 1e-9
# Uncertainties are understated by factors of a few; lines that scatter more than this are wrong.
_LARGEST_SCATTER = 10.0
# As `dunhamfit.algebra.variance`: fewer degrees of freedom tell no noise.
_LEAST_DEGREES = 4


@dataclass(frozen=True)
class SharedShift:
    """An offset or scale error that all new lines share, free of any prior.

    Attributes
    ----------
    kind : "offset" or "scale"
    value, sigma : float
        cm-1 for an offset, a fraction for a scale.
    p : float
        Probability of a shift this large, in either direction, if the lines agree.
    chi2, dof, p_rest : float, int, float
        Of the lines about the old constants once the shift is taken away.
    """

    kind: str
    value: float
    sigma: float
    p: float
    chi2: float
    dof: int
    p_rest: float


@dataclass(frozen=True)
class Deviation:
    """A line that stands out from the old constants and the other new lines.

    Attributes
    ----------
    label, place : str
    residual : float, cm-1
        Observed less what the old constants and the other new lines predict.
    in_sigma : float
        Over the root of sigma^2 + a C a^T, C the covariance of that prediction.
    p : float
        Two-sided, times the number of lines (S. Holm, Scand. J. Stat. 6, 65 (1979)).
    """

    label: str
    place: str
    residual: float
    in_sigma: float
    p: float


@dataclass(frozen=True)
class Arrival:
    """What the lines of a new source say of the old constants.

    Attributes
    ----------
    source : str
    lines : int
        Used ones.
    chi2, dof, p : float, int, float
        Test of all lines against the old constants.
    rms, mean_residual : float, cm-1
        Of the lines about the old constants, calibration terms of the new source at zero.
    scatter : float
        Scatter of the lines about constants of their own, in stated uncertainties; NaN if they are too few.
    shifts : tuple of SharedShift
        Offset and scale, but not what the source has as a free calibration term.
    deviations : tuple of Deviation
        Lines that stand out at 5 % in all, each after those before it are left out.
    agrees : bool
        At 5 %.
    explanation : "", "offset", "scale", "single lines", "noise", "offset and noise", "scale and noise" or "none"
        What makes lines agree that do not.
    """

    source: str
    lines: int
    chi2: float
    dof: int
    p: float
    rms: float
    mean_residual: float
    scatter: float
    shifts: tuple[SharedShift, ...]
    deviations: tuple[Deviation, ...]
    agrees: bool
    explanation: str


def check_arrival(fit: Fit, new_lines: LineList) -> Arrival:
    """Test the lines of a new source against a fit, by their stated uncertainties.

    A noise factor of the new source is not known before its lines are merged.

    Parameters
    ----------
    fit : Fit
    new_lines : LineList
        Of one source, which the fit does not have.

    Raises
    ------
    UsageError
        For lines of several sources, or of one that the fit has already.
    CannotDetermine
        If no line is used.
    """
    if len(new_lines.sources) != 1:
        raise UsageError("the lines of one source are tested at a time")
    lines = lines_for(fit, new_lines)
    problem = _problem(fit, lines)
    residuals = problem.residual * problem.sigma
    deviations, rest = _single_lines(problem, lines)
    return Arrival(
        source=new_lines.sources[0].name,
        lines=len(residuals),
        chi2=problem.chi2,
        dof=problem.dof,
        p=float(chdtrc(problem.dof, problem.chi2)) if problem.dof > 0 else float("nan"),
        rms=float(np.sqrt(np.mean(residuals**2))),
        mean_residual=float(np.mean(residuals)),
        scatter=problem.scatter,
        shifts=problem.shifts,
        deviations=deviations,
        agrees=problem.agrees,
        explanation="" if problem.agrees else _explanation(problem, rest),
    )


@dataclass(frozen=True, eq=False)
class _Problem:
    """New lines over the unknowns: s, then the calibration terms of the new source.

    Attributes
    ----------
    used : ndarray of int, shape (n,)
        Indices of the lines.
    position, sigma : ndarray of float, shape (n,), cm-1
    residual : ndarray of float, shape (n,)
        Of the prediction, over sigma.
    own : ndarray of float, shape (n, p)
        Derivatives with respect to the constants, over sigma. Not to calibration terms: a scale multiplies
        the observed positions, which hold the noise, so that beside free constants it would take all of it.
    rows : ndarray of float, shape (n, unknowns)
        Derivatives with respect to the unknowns, over sigma.
    prior : ndarray of float, shape (unknowns,)
        1 over the sigma of each unknown's prior.
    free : tuple of str
        Kinds of the calibration terms without one.
    """

    used: np.ndarray
    position: np.ndarray
    sigma: np.ndarray
    residual: np.ndarray
    own: np.ndarray
    rows: np.ndarray
    prior: np.ndarray
    free: tuple[str, ...]

    def without(self, line: int) -> _Problem:
        """Without the line at this place."""
        per_line = ("used", "position", "sigma", "residual", "own", "rows")
        return replace(self, **{name: np.delete(getattr(self, name), line, axis=0) for name in per_line})

    def with_noise(self, factor: float) -> _Problem:
        """With every uncertainty multiplied by `factor`."""
        per_sigma = ("residual", "own", "rows")
        return replace(self, sigma=self.sigma * factor, **{n: getattr(self, n) / factor for n in per_sigma})

    @cached_property
    def _basis(self) -> np.ndarray:
        """Orthonormal columns of the rows of lines and priors, shape (n + unknowns, unknowns)."""
        return qr(np.vstack([self.rows, np.diag(self.prior)]), mode="economic")[0]

    @cached_property
    def _left(self) -> np.ndarray:
        """Residuals of the lines, then of the priors, at the minimum, shape (n + unknowns,)."""
        target = np.concatenate([self.residual, np.zeros(len(self.prior))])
        return target - self._basis @ (self._basis.T @ target)

    @property
    def chi2(self) -> float:
        return float(self._left @ self._left)

    @property
    def dof(self) -> int:
        return len(self.residual) - len(self.free)

    @cached_property
    def shifts(self) -> tuple[SharedShift, ...]:
        """What a further column that all lines share takes from chi2."""
        found = []
        for kind, column in (("offset", 1.0 / self.sigma), ("scale", self.position / self.sigma)):
            if kind in self.free:
                continue
            taken = self._basis[: len(column)].T @ column
            size = column @ column - taken @ taken
            if size <= _NOTHING_LEFT * (column @ column):
                continue
            value, sigma = float(column @ self._left[: len(column)] / size), float(1 / math.sqrt(size))
            chi2, dof = self.chi2 - (value / sigma) ** 2, self.dof - 1
            found.append(
                SharedShift(kind, value, sigma, _two_sided(value / sigma), chi2, dof, float(chdtrc(dof, chi2)))
            )
        return tuple(found)

    @property
    def agrees(self) -> bool:
        """Both parts of chi2 are as expected; all of it, where an offset is among the unknowns."""
        for shift in self.shifts:
            if shift.kind == "offset":
                return shift.p >= _LEVEL_OF_PART and not shift.p_rest < _LEVEL_OF_PART
        return not chdtrc(self.dof, self.chi2) < LEVEL

    @property
    def scatter(self) -> float:
        """Root of the reduced chi2 of the lines about constants of their own."""
        norms = np.linalg.norm(self.own, axis=0)
        columns = self.own[:, norms > 0] / norms[norms > 0]
        basis, r, _ = qr(columns, mode="economic", pivoting=True)
        size = np.abs(np.diag(r))
        rank = int(np.sum(size > SINGULAR_BELOW * size[0])) if len(size) else 0
        degrees = len(self.residual) - rank
        if degrees < _LEAST_DEGREES:
            return float("nan")
        left = self.residual - basis[:, :rank] @ (basis[:, :rank].T @ self.residual)
        return float(math.sqrt(left @ left / degrees))

    def deviating(self) -> tuple[int, float, float]:
        """Place of the line that stands out most, its residual from all else, and that in sigma."""
        count = len(self.residual)
        free = 1 - np.einsum("ij,ij->i", self._basis[:count], self._basis[:count])
        free = np.where(free > _NOTHING_LEFT, free, np.inf)
        in_sigma = self._left[:count] / np.sqrt(free)
        place = int(np.argmax(np.abs(in_sigma)))
        residual = self._left[place] / free[place] * self.sigma[place]
        return place, float(residual), float(in_sigma[place])


def _problem(fit: Fit, lines: LineList) -> _Problem:
    model = extended_model(fit.model, lines)
    design = build_design(model, lines)
    used, row_of, observed = design.used, design.row_of, design.rows.observed
    old = len(fit.values)
    base = np.zeros(len(model.parameters))
    base[:old] = fit.values
    from_row = (lines.position[used] - observed.high[row_of]) - observed.low[row_of]
    residual = design.rows.residuals(base).high[row_of] + from_row
    sigma = lines.sigma[used]
    own = design.rows.whitened[row_of] / (sigma * design.rows.scale[row_of])[:, None]
    calibration = model.parameters[old:]
    priors = [model.prior(item) for item in calibration]
    return _Problem(
        used=used,
        position=lines.position[used],
        sigma=sigma,
        residual=residual / sigma,
        own=own[:, : len(model.constants)],
        rows=np.hstack([own[:, :old] @ fit.factor, own[:, old:]]),
        prior=np.append(np.ones(fit.factor.shape[1]), [0.0 if prior is None else 1 / prior.sigma for prior in priors]),
        free=tuple(item.kind for item, prior in zip(calibration, priors, strict=True) if prior is None),
    )


def _explanation(problem: _Problem, rest: _Problem) -> str:
    """The simplest of the known reasons that makes the lines agree; `rest` is without single lines."""
    if kind := _explaining_shift(problem):
        return kind
    if rest.agrees:
        return "single lines"
    if 1 < problem.scatter < _LARGEST_SCATTER:
        noisier = problem.with_noise(problem.scatter)
        if noisier.agrees:
            return "noise"
        if kind := _explaining_shift(noisier):
            return f"{kind} and noise"
    return "none"


def _explaining_shift(problem: _Problem) -> str:
    """Kind of the shift that leaves least of chi2, if what it leaves is as expected."""
    explaining = [item for item in problem.shifts if item.p_rest >= _LEVEL_OF_PART]
    return min(explaining, key=lambda item: item.chi2).kind if explaining else ""


def _single_lines(problem: _Problem, lines: LineList) -> tuple[tuple[Deviation, ...], _Problem]:
    """Lines that stand out, one after the other, and the problem without them."""
    found: list[Deviation] = []
    most = min(_MOST, max(1, int(_FEW * len(problem.used))))
    while len(found) < most and len(problem.used) > len(problem.free) + 1:
        place, residual, in_sigma = problem.deviating()
        p = _two_sided(in_sigma) * len(problem.used)
        if p >= LEVEL:
            break
        line = int(problem.used[place])
        found.append(Deviation(lines.label(line), lines.place(line), residual, in_sigma, p))
        problem = problem.without(place)
    return tuple(found), problem


def _two_sided(in_sigma: float) -> float:
    """Probability that a standard normal number is this far from 0 or further."""
    return float(erfc(abs(in_sigma) / math.sqrt(2)))
