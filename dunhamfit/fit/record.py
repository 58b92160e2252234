"""The result of a fit: values, covariance and everything that later steps read. Made once, never changed."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property
from types import MappingProxyType

import numpy as np

from dunhamfit.algebra.triangle import Triangle
from dunhamfit.errors import UsageError
from dunhamfit.fit.design import Design, Groups, build_design, calculate
from dunhamfit.fit.model import Model, Parameter
from dunhamfit.fit.noise import Noise
from dunhamfit.lines.line_list import LineList


@dataclass(frozen=True)
class Statistics:
    """Figures of merit of a fit.

    Attributes
    ----------
    lines : int
        Used lines.
    parameters : int
        Free parameters, calibration terms included.
    dof : int
        Lines and priors less parameters.
    chi2, reduced_chi2 : float
        Against the stated uncertainties, before any noise factor; priors included.
    condition : float
        Of the design with columns of unit norm.
    log_likelihood, aicc, bic : float
        With the noise factors in force.
    """

    lines: int
    parameters: int
    dof: int
    chi2: float
    reduced_chi2: float
    condition: float
    log_likelihood: float
    aicc: float
    bic: float


@dataclass(frozen=True, eq=False)
class Fit:
    """One set of constants with its covariance, and what it was made from.

    Attributes
    ----------
    model : Model
    lines : LineList
    values : ndarray of float, shape (p,)
        All parameters in the model's order: cm-1, and fractions for scales.
    factor : ndarray of float, shape (p, q)
        F with covariance F F^T, noise factors included; rows of fixed parameters are zero.
    noise : Noise
        Policy and noise factors.
    groups : Groups
        Groups of the used lines.
    statistics : Statistics
    warnings : tuple of str
    robust : str
        Robust loss in force, "none" for plain least squares.
    line_weights : ndarray of float, shape (n_lines,), or None
        What the robust loss multiplied 1 / sigma^2 of each line by; None for plain least squares.
    origins : mapping from the name of a constant to text
        Where a value that the lines did not give comes from: a fixed value, a prior, a relation.
    """

    model: Model
    lines: LineList
    values: np.ndarray
    factor: np.ndarray
    noise: Noise
    groups: Groups
    statistics: Statistics
    warnings: tuple[str, ...] = ()
    robust: str = "none"
    line_weights: np.ndarray | None = None
    origins: Mapping[str, str] = field(default_factory=lambda: MappingProxyType({}))
    design_made: Design | None = field(default=None, repr=False)

    def __post_init__(self):
        for array in (self.values, self.factor):
            array.flags.writeable = False

    @property
    def constants(self) -> tuple[Parameter, ...]:
        """Terms and breakdown terms, in the order of `covariance`."""
        return self.model.constants

    @cached_property
    def parameter_covariance(self) -> np.ndarray:
        """Covariance of all parameters, shape (p, p)."""
        return self.factor @ self.factor.T

    @property
    def covariance(self) -> np.ndarray:
        """Covariance of the constants, shape (constants, constants), cm-2."""
        count = len(self.constants)
        return self.parameter_covariance[:count, :count]

    @cached_property
    def sigmas(self) -> np.ndarray:
        """1 sigma of every parameter, shape (p,)."""
        return np.sqrt(np.einsum("ij,ij->i", self.factor, self.factor))

    def index(self, k: int, l: int, atom: str = "") -> int:
        """Place of a term, or of a breakdown term where `atom` is given.

        Raises
        ------
        UsageError
            If the model has no such term.
        """
        for place, item in enumerate(self.constants):
            if (item.k, item.l, item.atom) == (k, l, atom):
                return place
        wanted = f"d{k}{l}_{atom}" if atom else f"Y{k}{l}"
        raise UsageError(
            f"{wanted} is not in this fit; it has {', '.join(item.name for item in self.constants)}"
        )

    def value(self, k: int, l: int, atom: str = "") -> float:
        """Value of a term or breakdown term, cm-1."""
        return float(self.values[self.index(k, l, atom)])

    def sigma(self, k: int, l: int, atom: str = "") -> float:
        """1 sigma of a term or breakdown term, cm-1."""
        return float(self.sigmas[self.index(k, l, atom)])

    @cached_property
    def residuals(self) -> np.ndarray:
        """Observed less calculated position of every line, excluded ones too, shape (n_lines,), cm-1."""
        calculated = calculate(self.model, self.lines, self.values)
        return (self.lines.position - calculated.high) - calculated.low

    @cached_property
    def design(self) -> Design:
        """Rows of the used lines."""
        return self.design_made or build_design(self.model, self.lines, self.line_weights)

    @cached_property
    def triangles(self) -> tuple[Triangle, ...]:
        """Triangles about `values` with the stated uncertainties: one a group, then one of the priors, if any."""
        return self.design.rows.triangles(self.values)

    def to_frame(self) -> Mapping[str, list]:
        """Columns `name`, `value`, `sigma`, `unit`, ready for a data frame of any library."""
        count = len(self.constants)
        return {
            "name": [item.name for item in self.constants],
            "value": self.values[:count].tolist(),
            "sigma": self.sigmas[:count].tolist(),
            "unit": [item.unit for item in self.constants],
        }
