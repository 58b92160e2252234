r"""Sigma of differences of levels, and the parts it is made of.

With F F^T the covariance of all parameters, F_c its rows of the constants and F_k those of the
calibration terms, a prediction with slopes a has the variance |a F_c|^2. The rows of F_k span the
directions in which the constants move because the calibration is not known; the part of a F_c
along them is the calibration's, the rest is what would remain if it were known (the conditional
variance of normal distributions). The atomic masses and the choice of terms add to both.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import qr

from dunhamfit.algebra.extended import Extended, subtract
from dunhamfit.algebra.matrix import Matrix
from dunhamfit.errors import UsageError
from dunhamfit.fit.design import level_columns
from dunhamfit.fit.model import Model
from dunhamfit.fit.record import Fit
from dunhamfit.inference.selection import Selection
from dunhamfit.results.isotopologues import OwnConstants
from dunhamfit.results.mass_effect import monomials
from dunhamfit.units import WAVENUMBER_MICROMETRES, from_wavenumber


@dataclass(frozen=True, eq=False)
class Parts:
    """1 sigma of n differences of levels, cm-1.

    Attributes
    ----------
    fit, calibration, masses : ndarray of float, shape (n,)
    model : ndarray of float, shape (n,), or None
        Spread over near-equal sets of terms; None where it was not asked for.
    factor : ndarray of float, shape (n, q), cm-1
        F with covariance F F^T of the differences, the model's part left out.
    """

    fit: np.ndarray
    calibration: np.ndarray
    masses: np.ndarray
    model: np.ndarray | None
    factor: np.ndarray

    @property
    def covariance(self) -> np.ndarray:
        """Shape (n, n), cm-2; the model's part is left out."""
        return self.factor @ self.factor.T

    @property
    def total(self) -> np.ndarray:
        """Root of the sum of squares, shape (n,)."""
        parts = [self.fit, self.calibration, self.masses] + ([] if self.model is None else [self.model])
        return np.sqrt(np.sum(np.square(parts), axis=0))

    def columns(self, position: np.ndarray, unit: str) -> dict[str, list]:
        """Columns `sigma`, `sigma_fit`, ... in `unit`, as lists; None stands for a part not asked for.

        Parameters
        ----------
        position : ndarray of float, shape (n,), cm-1
            Needed for wavelengths only.
        unit : one of `dunhamfit.units.UNITS`
        """
        found = {
            "sigma": self.total,
            "sigma_fit": self.fit,
            "sigma_calibration": self.calibration,
            "sigma_masses": self.masses,
            "sigma_model": self.model,
        }
        return {
            name: [None] * len(position) if part is None else sigma_from_wavenumber(part, position, unit).tolist()
            for name, part in found.items()
        }


@dataclass(frozen=True, eq=False)
class Levels:
    """Columns v and J of n levels, upper or lower ones of lines.

    Attributes
    ----------
    v, j : ndarray of int, shape (n,)
    """

    v: np.ndarray
    j: np.ndarray


def differences(fit: Fit, isotopologue: str, upper: Levels, lower: Levels) -> np.ndarray:
    """E(upper) - E(lower) in cm-1, shape (n,), to the last place of a double."""
    matrix = Matrix.plain(_columns(fit.model, isotopologue, upper, lower))
    total = matrix.transposed_product(fit.values[: len(fit.constants)])
    return total.high + total.low


def parts_of(fit: Fit, own: OwnConstants, upper: Levels, lower: Levels, selection: Selection | None = None) -> Parts:
    """Sigma of E(upper) - E(lower) for levels of one isotopologue.

    Parameters
    ----------
    fit : Fit
    own : OwnConstants
        Of the isotopologue, as `dunhamfit.results.isotopologues.own_constants` makes them.
    upper, lower : Levels
    selection : Selection, optional
        Comparison of sets of terms made from the same lines; its near-equal sets give the model's part.

    Raises
    ------
    UsageError
        If the selection is one of another molecule.
    """
    name = own.isotopologue.name
    count = len(fit.constants)
    slopes = _columns(fit.model, name, upper, lower).high.T @ fit.factor[:count]
    along = slopes @ _calibration_directions(fit.factor[count:])
    of_calibration = (along**2).sum(axis=1)
    # By subtraction, so that the parts add up to the whole exactly; rounding could leave less than nothing.
    of_fit = np.clip((slopes**2).sum(axis=1) - of_calibration, 0.0, None)
    rows = monomials(fit.model, upper.v, upper.j) - monomials(fit.model, lower.v, lower.j)
    spread = None
    if selection is not None:
        wide = selection.wide.model
        if wide.reference.elements != fit.model.reference.elements:
            raise UsageError(f"the sets of terms were compared for {wide.reference.name}, not for this molecule")
        wide_rows = np.zeros((len(upper.v), len(wide.parameters)))
        wide_rows[:, : len(wide.constants)] = _columns(wide, name, upper, lower).high.T
        departure = differences(fit, name, upper, lower) - differences(selection.wide, name, upper, lower)
        spread = selection.model_spread(wide_rows, departure)
    of_masses = rows @ own.mass_factor
    return Parts(
        fit=np.sqrt(of_fit),
        calibration=np.sqrt(of_calibration),
        masses=np.sqrt((of_masses**2).sum(axis=1)),
        model=spread,
        factor=np.hstack([slopes, of_masses]),
    )


def _columns(model: Model, isotopologue: str, upper: Levels, lower: Levels) -> Extended:
    """Slopes of E(upper) - E(lower) with respect to the constants, Extended of shape (constants, n)."""
    code = np.zeros(len(upper.v), dtype=int)
    first = level_columns(model, (isotopologue,), code, upper.v, upper.j)
    second = level_columns(model, (isotopologue,), code, lower.v, lower.j)
    return subtract(first, second)


def _calibration_directions(factor: np.ndarray) -> np.ndarray:
    """Orthonormal basis of the rows of `factor`, shape (q, rank)."""
    norms = np.sqrt((factor**2).sum(axis=1))
    rows = factor[norms > 0] / norms[norms > 0][:, None]
    if not len(rows):
        return np.zeros((factor.shape[1], 0))
    basis, r, _ = qr(rows.T, mode="economic", pivoting=True)
    # Rows of unit length; what lies within 1e-12 of the others is no direction of its own.
    return basis[:, np.abs(np.diag(r)) > 1e-12]


def sigma_from_wavenumber(sigma: np.ndarray, position: np.ndarray, unit: str) -> np.ndarray:
    """Uncertainties in cm-1 as `unit`, to first order."""
    if unit == "um":
        return sigma * WAVENUMBER_MICROMETRES / position**2
    return from_wavenumber(sigma, unit)
