"""Dunham's relations against his printed ones, against exactly solvable potentials, and against
perturbation theory worked out level by level. Everything in exact rational numbers."""



from __future__ import annotations

from fractions import Fraction as F
from math import factorial, prod

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from dunhamfit.errors import UsageError
from dunhamfit.molecule.dunham_relations import dunham_relations

# J. L. Dunham, Phys. Rev. 41, 721 (1932), in powers of eta = 2 B_e/omega_e; the sign of Y04 as
# corrected later (lists with a plus are wrong). Key: (k, l, correction order).
PRINTED = {
    (0, 0, 0): {},
    (0, 0, 1): {(2,): F(3, 16), (1, 1): F(-7, 64)},
    (1, 0, 0): {(): F(1)},
    (1, 0, 1): {
        (4,): F(25, 16),
        (1, 3): F(-95, 32),
        (2, 2): F(-67, 64),
        (1, 1, 2): F(459, 128),
        (1, 1, 1, 1): F(-1155, 1024),
    },
    (2, 0, 0): {(2,): F(3, 4), (1, 1): F(-15, 16)},
    (0, 1, 0): {(): F(1, 2)},
    (0, 1, 1): {
        (): F(15, 16),
        (1,): F(14, 16),
        (2,): F(-9, 16),
        (3,): F(15, 16),
        (1, 2): F(-23, 16),
        (1, 1): F(21, 32),
        (1, 1, 1): F(21, 32),
    },
    (1, 1, 0): {(): F(3, 2), (1,): F(3, 2)},
    (0, 2, 0): {(): F(-1, 2)},
    (1, 2, 0): {(): F(-57, 8), (1,): F(-27, 4), (1, 1): F(-27, 8), (2,): F(3)},
    (0, 3, 0): {(): F(3, 2), (1,): F(1, 2)},
    (0, 4, 0): {(): F(-13, 2), (1,): F(-9, 2), (2,): F(1, 2), (1, 1): F(-9, 8)},
}

FULL = [(k, l) for l, top in enumerate((7, 5, 4, 3, 1)) for k in range(top + 1)]


def at(polynomial, a) -> F:
    """Value of a polynomial where a_n = a(n)."""
    return sum((value * prod((a(n) for n in indices), start=F(1)) for indices, value in polynomial.items()), F(0))


def binomial(power, n) -> F:
    return prod((F(power) - i for i in range(n)), start=F(1)) / factorial(n)


@pytest.mark.parametrize("key", PRINTED)
def test_relations_are_those_that_dunham_printed(key):
    k, l, order = key
    (relation,) = dunham_relations([(k, l)], orders=2)
    assert dict(relation.polynomials[order]) == PRINTED[key]


def test_kratzer_potential_is_exact_in_every_coefficient():
    """V = D(1 - re/r)^2, A. Kratzer, Z. Phys. 3, 289 (1920); E. Fues, Ann. Phys. 385, 367 (1926).

    With u = eta (v + 1/2), s = eta^2 J(J + 1), t = eta^2 the exact levels are
    2 e = 1 - (u + sqrt(1 + s + t/4))^-2, and a_n = (-1)^n (n + 1).
    """
    for relation in dunham_relations(FULL, orders=2):
        k, l = relation.k, relation.l
        for order, polynomial in enumerate(relation.polynomials):
            # u^k s^l t^c of the levels by the binomial series, twice.
            power = F(-2 - k, 2)
            exact = -binomial(-2, k) * binomial(power, l + order) * binomial(l + order, l) / 4**order / 2
            exact += F(1, 2) if (k, l, order) == (0, 0, 0) else 0
            assert at(polynomial, lambda n: F((-1) ** n * (n + 1))) == exact


def test_oscillator_with_inverse_square_barrier_is_exact_in_every_coefficient():
    """V = a0/4 (rho - 1/rho)^2, the isotonic oscillator; levels e = u + (sqrt(1 + 4 s + t) - 1)/4.

    P. M. Davidson, Proc. R. Soc. A 135, 459 (1932), from memory. xi^2 A = (rho - 1/rho)^2/4, so
    A = (1 + xi/2)^2/(1 + xi)^2 and a_n = (-1)^n (n + 3)/4 for n > 0.
    """
    for relation in dunham_relations(FULL, orders=2):
        k, l = relation.k, relation.l
        for order, polynomial in enumerate(relation.polynomials):
            exact = F(1) if (k, l, order) == (1, 0, 0) else F(0)
            if k == 0 and l + order:
                exact = binomial(F(1, 2), l + order) * binomial(l + order, l) * 4**l / 4
            assert at(polynomial, lambda n: F((-1) ** n * (n + 3), 4)) == exact


@pytest.mark.parametrize("steepness", [F(1), F(2), F(-7, 3)])
def test_morse_potential_has_two_vibrational_coefficients(steepness):
    """V = D(1 - exp(-b xi))^2, P. M. Morse, Phys. Rev. 34, 57 (1929): e = u - b^2 u^2/2 exactly."""

    def a(n):
        # (1 - exp(-x))^2 = 1 - 2 exp(-x) + exp(-2x), divided by x^2.
        return steepness**n * F((-1) ** n * (2 ** (n + 2) - 2), factorial(n + 2))

    for relation in dunham_relations([(k, 0) for k in range(9)], orders=2):
        values = [at(polynomial, a) for polynomial in relation.polynomials]
        exact = {1: F(1), 2: -(steepness**2) / 2}.get(relation.k, F(0))
        assert values == [exact, 0]
    # C. L. Pekeris, Phys. Rev. 45, 98 (1934): alpha_e = 6 sqrt(wexe Be^3)/we - 6 Be^2/we at leading order.
    (alpha,) = dunham_relations([(1, 1)], orders=1)
    # omega_e x_e = b^2 B_e and B_e^2/omega_e = omega_e eta^2/4.
    assert at(alpha.polynomials[0], a) == -(6 * steepness - 6) / 4


def level_by_perturbation(v: int, x: F, a: list[F], steps: int) -> list[F]:
    """Coefficients of lambda^(2s), s = 0..steps, of E/omega_e for one level: Rayleigh-Schroedinger
    perturbation theory (any textbook) in unnormalised Hermite functions, q H_n = H_(n+1)/2 + n H_(n-1)."""

    def times_q(vector, count):
        for _ in range(count):
            moved = {}
            for n, value in vector.items():
                moved[n + 1] = moved.get(n + 1, 0) + value / 2
                if n:
                    moved[n - 1] = moved.get(n - 1, 0) + value * n
            vector = moved
        return vector

    def perturbation(order, vector):
        # (a_i q^(i+2) + x (-1)^(i-2) (i-1) q^(i-2)) / 2 at lambda^i
        total = {}
        parts = [(a[order - 1], order + 2)] if order <= len(a) else []
        parts += [(x * (-1) ** order * (order - 1), order - 2)] if order >= 2 else []
        for factor, power in parts:
            for n, value in times_q(vector, power).items():
                total[n] = total.get(n, 0) + factor * value / 2
        return total

    states, energies = [{v: F(1)}], [F(2 * v + 1, 2)]
    for j in range(1, 2 * steps + 1):
        source = {}
        for i in range(1, j + 1):
            for n, value in perturbation(i, states[j - i]).items():
                source[n] = source.get(n, 0) + value
        energies.append(source.get(v, F(0)))
        for i in range(1, j + 1):
            for n, value in states[j - i].items():
                source[n] = source.get(n, 0) - energies[i] * value
        states.append({n: value / (v - n) for n, value in source.items() if n != v and value})
    assert not any(energies[1::2])
    return energies[::2]


small = st.fractions(min_value=-3, max_value=3, max_denominator=7)


@settings(max_examples=6, deadline=None)
@given(st.integers(0, 4), st.fractions(min_value=0, max_value=30, max_denominator=3), st.lists(small, max_size=8))
def test_sums_of_all_terms_are_the_levels_of_perturbation_theory(v, x, a):
    steps = 4
    # eta^s of a level collects every (k, l, c) with k + 2l - 1 + 2c = s.
    top = [(k, l) for l in range(steps) for k in range(steps + 2 - 2 * l)]
    relations = dunham_relations(top, orders=3, count=len(a))
    sums = [F(0)] * (steps + 1)
    for relation in relations:
        for order, polynomial in enumerate(relation.polynomials):
            s = relation.k + 2 * relation.l - 1 + 2 * order
            if 0 <= s <= steps:
                value = at(polynomial, lambda n: a[n - 1])
                sums[s] += value * F(2 * v + 1, 2) ** relation.k * x**relation.l
    # lambda^2 = eta.
    assert sums == level_by_perturbation(v, x, a, steps)


def test_a_shorter_potential_only_drops_what_it_lacks():
    whole = dunham_relations([(4, 0), (2, 1)], orders=2)
    short = dunham_relations([(4, 0), (2, 1)], orders=2, count=3)
    for long, cut in zip(whole, short, strict=True):
        for before, after in zip(long.polynomials, cut.polynomials, strict=True):
            assert dict(after) == {i: value for i, value in before.items() if all(n <= 3 for n in i)}


def test_a_term_does_not_depend_on_its_company():
    alone = dunham_relations([(1, 2)], orders=2)[0]
    among = next(item for item in dunham_relations(FULL, orders=2) if (item.k, item.l) == (1, 2))
    assert [dict(p) for p in alone.polynomials] == [dict(p) for p in among.polynomials]


@pytest.mark.parametrize(
    ("terms", "options", "message"),
    [
        ([], {}, "terms must be pairs"),
        ([(-1, 0)], {}, "terms must be pairs (k, l) of whole numbers from 0"),
        ([(1, 0)], {"orders": 0}, "'orders' must be 1 or more (got 0)"),
        ([(1, 0)], {"count": -1}, "'count' must be 0 or more (got -1)"),
    ],
)
def test_wrong_use_is_refused(terms, options, message):
    with pytest.raises(UsageError) as refused:
        dunham_relations(terms, **options)
    assert message in str(refused.value)
