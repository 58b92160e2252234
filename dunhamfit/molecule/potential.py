r"""Dunham coefficients from a potential, with analytic derivatives.

    V(r) = a0 xi^2 (1 + a1 xi + a2 xi^2 + ... + aN xi^N),   xi = (r - r_e)/r_e,   a0 = omega_e^2/(4 B_e)

One potential fixes every Y_kl, centrifugal terms included, through the relations of
`dunham_relations`. They are an asymptotic series in (2 B_e/omega_e)^2; `orders` says how many
orders are kept (2: the leading one and the first correction).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from dunhamfit.errors import UsageError
from dunhamfit.molecule.dunham_relations import dunham_relations, term_pairs

# h/(8 pi^2 c u), CODATA 2022: B_e = ROTATION_FACTOR / (mu r_e^2).
ROTATION_FACTOR = 16.857629168  # cm-1 u A^2


def dunham_coefficients(omega_e: float, b_e: float, a, terms, *, orders: int = 2) -> np.ndarray:
    """Y_kl of the potential with the given constants.

    Parameters
    ----------
    omega_e, b_e : float, cm-1
    a : array_like of float, shape (n_a,)
        a1, a2, ...; coefficients beyond the last one are zero.
    terms : sequence of (k, l) pairs, length n_terms
        (0, 0) gives Y_00.
    orders : int
        Number of orders of the relations.

    Returns
    -------
    ndarray of float, shape (n_terms,), cm-1

    Raises
    ------
    UsageError

    Notes
    -----
    The first call with new `terms`, `orders` or number of coefficients derives the relations.
    """
    omega_e, b_e, a = _checked(omega_e, b_e, a)
    table = _table(term_pairs(terms), int(orders), a.size)
    powers = (2.0 * b_e / omega_e) ** table.eta_power
    return omega_e * (powers * (table.coefficients @ table.monomials(a))).sum(axis=1)


def dunham_jacobian(omega_e: float, b_e: float, a, terms, *, orders: int = 2) -> np.ndarray:
    """Derivatives of `dunham_coefficients` with respect to (omega_e, B_e, a1, ..., aN).

    Returns
    -------
    ndarray of float, shape (n_terms, 2 + n_a)
        Columns in cm-1 per cm-1, cm-1 per cm-1, then cm-1.
    """
    omega_e, b_e, a = _checked(omega_e, b_e, a)
    table = _table(term_pairs(terms), int(orders), a.size)
    monomials = table.monomials(a)
    powers = (2.0 * b_e / omega_e) ** table.eta_power
    parts = powers * (table.coefficients @ monomials)
    jacobian = np.empty((len(parts), 2 + a.size))
    jacobian[:, 0] = ((1 - table.eta_power) * parts).sum(axis=1)
    jacobian[:, 1] = (table.eta_power * parts).sum(axis=1) * (omega_e / b_e)
    slopes = table.exponents * monomials[table.divided]  # d(monomial)/d(a_n), shape (n_monomials, n_a)
    jacobian[:, 2:] = omega_e * np.einsum("to,ton->tn", powers, table.coefficients @ slopes)
    return jacobian


def dunham_potential(r, *, r_e: float, omega_e: float, b_e: float, a) -> np.ndarray:
    """V(r) in cm-1, shape of `r`; `r` and `r_e` in one unit of length."""
    omega_e, b_e, a = _checked(omega_e, b_e, a)
    if not r_e > 0:
        raise UsageError(f"'r_e' must be positive (got {r_e})")
    xi = np.asarray(r, dtype=float) / r_e - 1.0
    return omega_e**2 / (4.0 * b_e) * xi**2 * np.polynomial.polynomial.polyval(xi, np.concatenate([[1.0], a]))


def _checked(omega_e, b_e, a) -> tuple[float, float, np.ndarray]:
    a = np.asarray(a, dtype=float)
    if not (omega_e > 0 and b_e > 0):
        raise UsageError(f"'omega_e' and 'b_e' must be positive (got {omega_e} and {b_e} cm-1)")
    if a.ndim != 1 or not np.all(np.isfinite(a)):
        raise UsageError(f"'a' must be a row of finite numbers a1, a2, ... (got shape {a.shape})")
    return float(omega_e), float(b_e), a


@dataclass(frozen=True, eq=False)
class _Table:
    """The relations as arrays.

    Attributes
    ----------
    coefficients : ndarray of float, shape (n_terms, orders, n_monomials)
    eta_power : ndarray of int, shape (n_terms, orders)
    exponents : ndarray of int, shape (n_monomials, n_a)
    divided : ndarray of int, shape (n_monomials, n_a)
        Index of the monomial divided by a_n; 0 where it does not hold a_n.
    """

    coefficients: np.ndarray
    eta_power: np.ndarray
    exponents: np.ndarray
    divided: np.ndarray

    def monomials(self, a: np.ndarray) -> np.ndarray:
        """Values of the monomials, shape (n_monomials,)."""
        highest = int(self.exponents.max(initial=0))
        powers = a[:, None] ** np.arange(highest + 1)
        return np.prod(powers[np.arange(a.size), self.exponents], axis=1)


@lru_cache(maxsize=16)
def _table(terms: tuple[tuple[int, int], ...], orders: int, count: int) -> _Table:
    relations = dunham_relations(terms, orders=orders, count=count)
    held = {indices for relation in relations for part in relation.polynomials for indices in part}
    held |= {_without(indices, n) for indices in held for n in set(indices)}
    order = {indices: place for place, indices in enumerate(sorted(held | {()}, key=lambda i: (sum(i), i)))}
    coefficients = np.zeros((len(terms), orders, len(order)))
    for row, relation in enumerate(relations):
        for c, polynomial in enumerate(relation.polynomials):
            for indices, value in polynomial.items():
                coefficients[row, c, order[indices]] = float(value)
    exponents = np.zeros((len(order), count), dtype=int)
    divided = np.zeros((len(order), count), dtype=int)
    for indices, place in order.items():
        for n in set(indices):
            exponents[place, n - 1] = indices.count(n)
            divided[place, n - 1] = order.get(_without(indices, n), 0)
    k, l = np.array(terms).T
    eta_power = (k + 2 * l - 1)[:, None] + 2 * np.arange(orders)
    return _Table(coefficients, eta_power, exponents, divided)


def _without(indices: tuple[int, ...], n: int) -> tuple[int, ...]:
    place = indices.index(n)
    return indices[:place] + indices[place + 1 :]
