"""Lines between the exact levels of a potential give its exact Dunham coefficients.

Kratzer-Fues potential: closed form for the levels, series for the Y_kl; see
`reference.kratzer`. What a finite set of terms cannot hold goes into the coefficients that
it has, and how much follows from the exact positions and coefficients.
"""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest
from mpmath import mp, mpf
from reference.exact_solution import least_squares
from reference.kratzer import EXACT_LEVELS, EXACT_Y, level, position

from dunhamfit.fit.solve import fit_lines
from dunhamfit.lines.line_list import LineList, Source
from dunhamfit.molecule.terms import TermSet

SIGMA = 1e-6


def transitions(v_max: int, j_max: int):
    """(v', J', v'', J'') of all R and P lines between neighbouring levels, and pure rotation."""
    for j in range(j_max):
        yield 0, j + 1, 0, j
        for v in range(v_max):
            yield v + 1, j + 1, v, j
            yield v + 1, j, v, j + 1


def exact_lines(v_max: int, j_max: int) -> LineList:
    v_upper, j_upper, v_lower, j_lower = (np.array(c) for c in zip(*transitions(v_max, j_max), strict=True))
    zero = np.zeros(len(v_upper), dtype=int)
    quantum_numbers = zip(v_upper.tolist(), j_upper.tolist(), v_lower.tolist(), j_lower.tolist(), strict=True)
    return LineList(
        position=np.array([position(*item) for item in quantum_numbers]),
        sigma=zero + SIGMA,
        v_upper=v_upper,
        j_upper=j_upper,
        v_lower=v_lower,
        j_lower=j_lower,
        isotopologue=zero,
        source=zero,
        file=zero,
        row=np.arange(1, len(zero) + 1),
        exclusion=zero,
        isotopologues=("12C16O",),
        sources=(Source("exact"),),
    )


def truncation(lines: LineList, terms) -> np.ndarray:
    """What a finite set of terms makes of the rest of the series: least squares, in 80 digits, of what the
    exact coefficients of the set leave of the exact positions."""

    def monomial(v, j, k, l) -> Fraction:
        return Fraction(2 * int(v) + 1, 2) ** k * Fraction(int(j) * (int(j) + 1)) ** l

    matrix, rest = [], []
    for v_upper, j_upper, v_lower, j_lower in zip(
        lines.v_upper.tolist(),
        lines.j_upper.tolist(),
        lines.v_lower.tolist(),
        lines.j_lower.tolist(),
        strict=True,
    ):
        row = [monomial(v_upper, j_upper, *key) - monomial(v_lower, j_lower, *key) for key in terms]
        kept = sum(Fraction(EXACT_Y[key]) * entry for key, entry in zip(terms, row, strict=True))
        with mp.workdps(40):
            exact = Fraction(str(level(v_upper, j_upper) - level(v_lower, j_lower)))
        matrix.append(row)
        rest.append(exact - kept)
    return least_squares(matrix, rest, lines.sigma.tolist())[0].astype(float)


def test_the_closed_form_gives_the_tabulated_levels():
    with mp.workdps(40):
        for (v, j), value in EXACT_LEVELS.items():
            assert abs(level(v, j) / mpf(value) - 1) < mpf(10) ** -18


@pytest.mark.parametrize(
    ("orders", "v_max", "j_max"),
    [([2, 1, 0], 2, 8), ([3, 2, 1], 3, 12), ([4, 3, 2, 1], 4, 16), ([4, 4, 3, 2], 4, 20)],
)
def test_exact_levels_return_the_exact_coefficients(orders, v_max, j_max):
    terms = TermSet.from_orders(orders)
    lines = exact_lines(v_max, j_max)
    fit = fit_lines(lines, terms, reference="12C16O")
    keys = [(term.k, term.l) for term in terms]
    exact = np.array([float(EXACT_Y[key]) for key in keys])
    # Positions are rounded to 2e-13 cm-1, 2e-7 of sigma; there is nothing else.
    assert np.all(np.abs(fit.values - exact - truncation(lines, keys)) <= 2e-6 * fit.sigmas)


def test_coefficients_come_closer_with_every_order():
    """Y10 of the exact potential is met to ten digits and more once the series is long enough."""
    exact = float(EXACT_Y[1, 0])
    lines = exact_lines(4, 10)
    errors = []
    for orders in ([1, 1, 0], [2, 2, 1], [3, 3, 2, 1], [4, 4, 3, 2, 1]):
        fit = fit_lines(lines, TermSet.from_orders(orders), reference="12C16O")
        errors.append(abs(fit.value(1, 0) / exact - 1))
    assert errors == sorted(errors, reverse=True)
    assert errors[-1] < 1e-8
