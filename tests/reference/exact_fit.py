"""The same fit in integers and 80 digits: what every constant and sigma is judged against.

The monomials (2v + 1)^k [J(J + 1)]^l are whole numbers, and the products of all columns are
summed as Python integers for each isotopologue and each sigma. Mass factors and the small
normal equations follow in mpmath, where even a condition of 1e36 leaves 40 digits.
"""

from __future__ import annotations

from fractions import Fraction

import numpy as np
from mpmath import mp, mpf

from dunhamfit.fit.model import Model
from dunhamfit.lines.line_list import LineList

from .exact_solution import solved

_SHIFT = 2**70  # positions above 1e-3 cm-1 are whole multiples of 2^-70


def exact_fit(model: Model, lines: LineList) -> tuple[np.ndarray, np.ndarray]:
    """Values and sigmas of the constants of `model`, arrays of mpf; calibration terms and priors are not covered."""
    used = np.flatnonzero(lines.used)
    classes = {}
    for index in used:
        classes.setdefault((int(lines.isotopologue[index]), float(lines.sigma[index])), []).append(index)
    constants = model.constants
    with mp.workdps(80):
        gram = np.full((len(constants), len(constants)), mpf(0), dtype=object)
        right = np.full(len(constants), mpf(0), dtype=object)
        for (code, sigma), members in classes.items():
            columns = _whole_numbers(constants, lines, np.array(members))
            factors = _factors(model, lines.isotopologues[code])
            observed = np.array(
                [int(Fraction(x) * _SHIFT) for x in lines.position[members].tolist()], dtype=object
            )
            weight = 1 / _mpf(Fraction(sigma)) ** 2
            gram = gram + weight * np.outer(factors, factors) * (columns @ columns.T)
            right = right + weight * factors * (columns @ observed) / _SHIFT
        values, covariance = solved(gram, right)
        return values, np.array([mp.sqrt(covariance[i, i]) for i in range(len(constants))], dtype=object)


def distance_in_sigma(values: np.ndarray, exact: np.ndarray, sigmas: np.ndarray) -> np.ndarray:
    """How far float64 values lie from the exact ones, in units of their sigma."""
    return np.array(
        [abs(float((mpf(float(v)) - e) / s)) for v, e, s in zip(values, exact, sigmas, strict=True)]
    )


def _whole_numbers(constants, lines: LineList, members: np.ndarray) -> np.ndarray:
    """(2v' + 1)^k [J'(J' + 1)]^l less the same of the lower level, Python integers, shape (constants, members)."""

    def level(v, j, item):
        v, j = v[members].astype(object), j[members].astype(object)
        return (2 * v + 1) ** item.k * (j * (j + 1)) ** item.l

    return np.array(
        [level(lines.v_upper, lines.j_upper, c) - level(lines.v_lower, lines.j_lower, c) for c in constants],
        dtype=object,
    )


def _factors(model: Model, name: str) -> np.ndarray:
    """2^-k rho^(k + 2l), times M_A(0)/M_A(a) - 1 for breakdown terms, from the decimal masses."""
    reference, other = model.reference, model.isotopologue(name)
    own = [_mpf(Fraction(mass.value)) for mass in reference.masses]
    masses = [_mpf(Fraction(mass.value)) for mass in other.masses]
    rho = mp.sqrt((own[0] * own[1] / sum(own)) / (masses[0] * masses[1] / sum(masses)))
    factors = []
    for item in model.constants:
        factor = rho ** (item.k + 2 * item.l) / mpf(2) ** item.k
        if item.atom:
            place = reference.elements.index(item.atom)
            factor = factor * (own[place] / masses[place] - 1)
        factors.append(factor)
    return np.array(factors, dtype=object)


def _mpf(value: Fraction) -> mpf:
    return mpf(value.numerator) / mpf(value.denominator)
