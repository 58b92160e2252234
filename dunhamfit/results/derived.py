r"""Derived constants of one isotopologue: omega_e, B_e, r_e, zero-point energy and their kin.

Y_kl are not quite the constants of the potential V = a0 xi^2 (1 + a1 xi + a2 xi^2 + ...). Dunham's
relations (`dunhamfit.molecule.potential`) are solved for omega_e, B_e, a1, a2, ... from as many Y_kl
as there are unknowns, each to the order that these unknowns allow: Y10 and Y01 with their first
correction need a1 to a4 to leading order (from Y11, Y20, Y21, Y30), and Y11 and Y20 with theirs need a5
and a6 besides (from Y31, Y40). The leading parts of Y_20, Y_11 and Y_02 are then the corrected
omega_e x_e, alpha_e and D_e. Signs: omega_e x_e = -Y20, alpha_e = -Y11, D_e = -Y02.

r_e comes in three steps, r_e = sqrt(h/(8 pi^2 c mu B)):

    from Y01            as it stands
    Dunham-corrected    B_e of the potential of this isotopologue
    BO-corrected        from U01 = mu_0 (Y01 - sum_A d01_A), the limit of infinite masses. Dunham's
                        correction is of relative size 1/mu, so that U01 holds none of it: this step
                        replaces the one before and is not added to it
                        (J. K. G. Watson, J. Mol. Spectrosc. 45, 99 (1973); from memory)

Every value carries its slopes with respect to the Y_kl, so that all of them have one covariance.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from dunhamfit.errors import NotConverged, UsageError
from dunhamfit.fit.record import Fit
from dunhamfit.molecule.isotopologue import Isotopologue
from dunhamfit.molecule.potential import ROTATION_FACTOR, dunham_coefficients, dunham_jacobian
from dunhamfit.results.isotopologues import OwnConstants, own_constants
from dunhamfit.results.mass_effect import mass_slopes

# Relative standard uncertainty of h/(8 pi^2 c u): that of the atomic mass constant, CODATA 2022.
ROTATION_FACTOR_RELATIVE = 3.1e-10
_LEADING = ((1, 0), (2, 0), (0, 1), (1, 1))
# Terms from which the potential is found, and those of them that are taken with their first correction;
# the first set that the fit has is used.
_LEVELS = (
    ((*_LEADING, (3, 0), (2, 1), (4, 0), (3, 1)), _LEADING),
    ((*_LEADING, (3, 0), (2, 1)), ((1, 0), (0, 1))),
    (_LEADING, ()),
)
# Name, k, l, sign and definition of the conventional constants.
CONVENTIONAL = (
    ("omega_e", 1, 0, 1, "Y10"),
    ("omega_e x_e", 2, 0, -1, "-Y20"),
    ("omega_e y_e", 3, 0, 1, "Y30"),
    ("B_e", 0, 1, 1, "Y01"),
    ("alpha_e", 1, 1, -1, "-Y11"),
    ("gamma_e", 2, 1, 1, "Y21"),
    ("D_e", 0, 2, -1, "-Y02"),
    ("beta_e", 1, 2, -1, "-Y12"),
    ("H_e", 0, 3, 1, "Y03"),
)
# Newton's method for the potential starts from the leading relations, some six digits from the end. The
# last coefficients hang on differences of large terms and stand still to 1e-9 only.
_STEPS, _SETTLED = 20, 1e-9


@dataclass(frozen=True)
class Derived:
    """One derived constant.

    Attributes
    ----------
    name : str
    value, sigma : float
        1 sigma with every part; of the masses and of h/(8 pi^2 c u) too, where they enter.
    unit : "cm-1" or "A"
    definition : str
    """

    name: str
    value: float
    sigma: float
    unit: str
    definition: str


@dataclass(frozen=True, eq=False)
class DerivedConstants:
    """Derived constants of one isotopologue with their covariance.

    Attributes
    ----------
    isotopologue : str
    items : tuple of Derived, length n
    factor : ndarray of float, shape (n, q)
        F with covariance F F^T, in the units of the items.
    remarks : tuple of str
        What could not be derived, and why.
    """

    isotopologue: str
    items: tuple[Derived, ...]
    factor: np.ndarray
    remarks: tuple[str, ...] = ()

    @cached_property
    def covariance(self) -> np.ndarray:
        """Shape (n, n)."""
        return self.factor @ self.factor.T

    def __getitem__(self, name: str) -> Derived:
        for item in self.items:
            if item.name == name:
                return item
        raise UsageError(f"'{name}' was not derived; there are {', '.join(item.name for item in self.items)}")


@dataclass(frozen=True, eq=False)
class Potential:
    """Constants of the potential from Dunham's relations.

    Attributes
    ----------
    values : ndarray of float, shape (2 + n_a,)
        omega_e and B_e in cm-1, a1, a2, ...
    slopes : ndarray of float, shape (2 + n_a, terms)
        Derivatives with respect to every Y_kl of the isotopologue.
    corrected : tuple of (k, l)
        Terms whose first correction was taken into account.
    """

    values: np.ndarray
    slopes: np.ndarray
    corrected: tuple[tuple[int, int], ...]

    def coefficient(self, k: int, l: int, orders: int) -> tuple[float, np.ndarray]:
        """Y_kl of this potential to the given number of orders, and its slopes, shape (terms,)."""
        omega, b, a = self.values[0], self.values[1], self.values[2:]
        value = dunham_coefficients(omega, b, a, [(k, l)], orders=orders)
        return float(value[0]), (dunham_jacobian(omega, b, a, [(k, l)], orders=orders) @ self.slopes)[0]


def derive(fit: Fit, isotopologue: str | None = None) -> DerivedConstants:
    """Derived constants of an isotopologue, by default the reference.

    Raises
    ------
    UsageError
        If it is no isotopologue of the fit's molecule.
    """
    own = own_constants(fit, isotopologue)
    found = _Collected(own)
    for name, k, l, sign, definition in CONVENTIONAL:
        place = own.index(k, l)
        if place is not None:
            found.add(name, sign * own.values[place], sign * _unit(own, k, l), "cm-1", definition)
    potential = None
    try:
        potential = potential_of(own)
        if potential is None:
            found.remarks.append("no Dunham corrections and no Y00: they need Y10, Y20, Y01 and Y11")
    except NotConverged as problem:
        found.remarks.append(f"no Dunham corrections and no Y00: {problem}")
    if potential is not None:
        _corrected(found, potential)
        _zero_point(found, potential)
    if own.index(0, 1) is not None:
        _distances(found, fit, potential)
    return found.made()


def potential_of(own: OwnConstants) -> Potential | None:
    """The potential that has the lowest Y_kl; None where terms are missing.

    Raises
    ------
    NotConverged
    """
    usable = [level for level in _LEVELS if all(own.index(k, l) is not None for k, l in level[0])]
    if not usable:
        return None
    wanted, corrected = usable[0]
    places = [own.index(k, l) for k, l in wanted]
    target = own.values[places]
    y10, y20, y01, y11 = target[:4]
    if not (y10 > 0 and y01 > 0):
        raise NotConverged(f"no potential has Y10 = {y10:.6g} and Y01 = {y01:.6g} cm-1: both must be positive")
    a1 = y11 * y10 / (6 * y01**2) - 1
    a2 = 2 * y20 / (3 * y01) + 1.25 * a1**2
    values = np.array([y10, y01, a1, a2, *np.zeros(len(wanted) - 4)])
    for _ in range(_STEPS):
        reached, jacobian = _relations(values, wanted, corrected)
        step = np.linalg.solve(jacobian, target - reached)
        values = values + step
        if np.all(np.abs(step) <= _SETTLED * np.maximum(np.abs(values), 1.0)):
            break
    else:
        raise NotConverged("no potential reproduces the constants: Dunham's relations do not converge for them")
    slopes = np.zeros((len(values), len(own.values)))
    slopes[:, places] = np.linalg.solve(jacobian, np.eye(len(values)))
    return Potential(values, slopes, corrected)


def _relations(values: np.ndarray, wanted, corrected) -> tuple[np.ndarray, np.ndarray]:
    """The wanted Y_kl and their derivatives, those in `corrected` to two orders and the others to one."""
    omega, b, a = values[0], values[1], values[2:]
    reached, jacobian = np.empty(len(wanted)), np.empty((len(wanted), len(values)))
    for orders in (1, 2):
        rows = [i for i, term in enumerate(wanted) if (term in corrected) == (orders == 2)]
        if rows:
            terms = [wanted[i] for i in rows]
            reached[rows] = dunham_coefficients(omega, b, a, terms, orders=orders)
            jacobian[rows] = dunham_jacobian(omega, b, a, terms, orders=orders)
    return reached, jacobian


class _Collected:
    """Derived constants as they are found: values with slopes, and a relative part of the masses."""

    def __init__(self, own: OwnConstants):
        self.own = own
        self.remarks: list[str] = []
        self._found: list[tuple[str, float, str, str]] = []
        self._rows: list[np.ndarray] = []
        self._factor = np.hstack([own.factor, own.mass_factor])

    def add(self, name: str, value: float, slopes: np.ndarray, unit: str, definition: str) -> None:
        """A constant that depends on the Y_kl of the isotopologue alone."""
        self.add_row(name, value, np.append(slopes @ self._factor, 0.0), unit, definition)

    def add_row(self, name: str, value: float, row: np.ndarray, unit: str, definition: str) -> None:
        """A constant whose row of the covariance factor, shape (lines' and masses' columns + 1,), is known."""
        self._found.append((name, float(value), unit, definition))
        self._rows.append(row)

    def made(self) -> DerivedConstants:
        factor = np.array(self._rows).reshape(len(self._rows), -1)
        sigmas = np.sqrt((factor**2).sum(axis=1))
        items = tuple(
            Derived(name, value, float(sigma), unit, definition)
            for (name, value, unit, definition), sigma in zip(self._found, sigmas, strict=True)
        )
        return DerivedConstants(self.own.isotopologue.name, items, factor, tuple(self.remarks))


def _unit(own: OwnConstants, k: int, l: int) -> np.ndarray:
    row = np.zeros(len(own.values))
    row[own.index(k, l)] = 1.0
    return row


def _corrected(found: _Collected, potential: Potential) -> None:
    """Dunham-corrected constants, and the corrections that lead from the Y_kl to them."""
    own = found.own
    for k, l, name in ((1, 0, "omega_e"), (2, 0, "omega_e x_e"), (0, 1, "B_e"), (1, 1, "alpha_e")):
        sign = -1.0 if k + l == 2 else 1.0
        if (k, l) in potential.corrected:
            value, slopes = potential.coefficient(k, l, orders=1)
            _with_correction(found, name, sign, value, slopes, k, l)
    if own.index(0, 2) is not None and (1, 0) in potential.corrected:
        _with_correction(found, "D_e", -1.0, *potential.coefficient(0, 2, orders=1), 0, 2)
    if not potential.corrected:
        found.remarks.append("no Dunham corrections: those of omega_e, B_e and D_e need Y30 and Y21 too")
    elif (2, 0) not in potential.corrected:
        found.remarks.append("no Dunham corrections of omega_e x_e and alpha_e: they need Y40 and Y31 too")


def _with_correction(found: _Collected, name: str, sign: float, value: float, slopes, k: int, l: int) -> None:
    own = found.own
    found.add(f"{name} (Dunham)", sign * value, sign * slopes, "cm-1", "of the potential, by Dunham's relations")
    correction = sign * (value - own.values[own.index(k, l)])
    of_correction = sign * (slopes - _unit(own, k, l))
    found.add(f"{name} correction", correction, of_correction, "cm-1", "Dunham-corrected less plain value")


def _zero_point(found: _Collected, potential: Potential) -> None:
    """Y00 to leading order, and the energy of v = 0, J = 0 above the minimum of the potential."""
    own = found.own
    y00, y00_slopes = potential.coefficient(0, 0, orders=2)
    found.add("Y00", y00, y00_slopes, "cm-1", "(B_e/8)(3 a2 - 7 a1^2/4), from the other constants")
    energy, slopes = y00, y00_slopes.copy()
    for place, term in enumerate(own.terms):
        if term.l == 0:
            energy += own.values[place] * 0.5**term.k
            slopes[place] += 0.5**term.k
    found.add("zero-point energy", energy, slopes, "cm-1", "Y00 + sum_k Y_k0 / 2^k")


def _distances(found: _Collected, fit: Fit, potential: Potential | None) -> None:
    """r_e in its three steps, as far as the constants allow."""
    own = found.own
    y01 = own.values[own.index(0, 1)]
    if not y01 > 0:
        found.remarks.append("no r_e: Y01 is not positive")
        return
    factor = np.hstack([own.factor, own.mass_factor])
    relative = _relative_mass_row(own.isotopologue, own)
    steps = [("r_e", y01, _unit(own, 0, 1) @ factor, "from Y01 as it stands")]
    if potential is not None and (0, 1) in potential.corrected:
        steps.append(("r_e (Dunham)", potential.values[1], potential.slopes[1] @ factor, "from B_e (Dunham)"))
    for name, b, row, definition in steps:
        r_e, of_r = _distance(own.isotopologue.mu, b, row, relative)
        found.add_row(name, r_e, of_r, "A", definition)
    atoms = {item.atom for item in fit.constants if item.atom and (item.k, item.l) == (0, 1)}
    missing = [atom for atom in dict.fromkeys(fit.model.reference.elements) if atom not in atoms]
    if missing:
        found.remarks.append(
            f"no BO-corrected r_e: it needs breakdown term 01 of every atom; that of {' and '.join(missing)} is missing"
        )
        return
    _add_born_oppenheimer(found, fit)


def _add_born_oppenheimer(found: _Collected, fit: Fit) -> None:
    """r_e of the molecule with infinite masses, from U01/mu_0 = Y01 - sum_A d01_A of the reference."""
    own, reference = found.own, fit.model.reference
    count = len(fit.constants)
    bare = np.zeros(count)
    for place, item in enumerate(fit.constants):
        if (item.k, item.l) == (0, 1):
            bare[place] = -reference.elements.count(item.atom) if item.atom else 1.0
    by_mass = mass_slopes(fit)
    of_masses = np.zeros(len(own.nuclides))
    for column, nuclide in enumerate(by_mass.nuclides):
        slope = float(bare @ by_mass.parameters[:count, column])
        of_masses[own.nuclides.index(nuclide)] = slope * fit.model.masses[nuclide].sigma
    row = np.append(bare @ fit.factor[:count], of_masses)
    r_e, of_r = _distance(reference.mu, float(bare @ fit.values[:count]), row, _relative_mass_row(reference, own))
    found.add_row("r_e (BO)", r_e, of_r, "A", "from U01, the limit of infinite masses; holds Dunham's correction")


def _distance(mu: float, b: float, b_row: np.ndarray, mu_row: np.ndarray) -> tuple[float, np.ndarray]:
    """r_e in A and its row of the covariance factor, from B in cm-1 with its row and that of ln(mu)."""
    r_e = float(np.sqrt(ROTATION_FACTOR / (mu * b)))
    return r_e, np.append(-0.5 * r_e * (b_row / b + mu_row), 0.5 * r_e * ROTATION_FACTOR_RELATIVE)


def _relative_mass_row(isotopologue: Isotopologue, own: OwnConstants) -> np.ndarray:
    """d ln(mu) over 1 sigma of each mass, in the columns of the masses."""
    row = np.zeros(own.factor.shape[1] + len(own.nuclides))
    for nuclide, mass, slope in zip(isotopologue.nuclides, isotopologue.masses, isotopologue.mu_gradient, strict=True):
        row[own.factor.shape[1] + own.nuclides.index(nuclide)] += slope * mass.sigma
    return row
