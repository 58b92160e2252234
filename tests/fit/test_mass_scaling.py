"""Mass factors of the model against a published analysis of isotopologues.

R. Farrenq et al., J. Mol. Spectrosc. 149, 375 (1991): mass-independent U_kl and Delta_kl of
carbon monoxide, and the Y_kl of 13C16O that they gave. The conventional form is
Y_kl = mu^-(k/2 + l) U_kl (1 + m_e sum_A Delta_kl^A / M_A); the model's own is that of
`dunhamfit.molecule.terms`, with the constants of the reference isotopologue.
"""

from __future__ import annotations

from decimal import Decimal, localcontext

import pytest
from reference.carbon_monoxide import (
    FARRENQ_1991_DELTA,
    FARRENQ_1991_ELECTRON,
    FARRENQ_1991_MASSES,
    FARRENQ_1991_U,
    FARRENQ_1991_Y_13C16O,
)

from dunhamfit.fit.model import Model
from dunhamfit.molecule.isotopologue import Isotopologue
from dunhamfit.molecule.masses import Masses
from dunhamfit.molecule.terms import BreakdownTerm, TermSet

# Digits published: U_kl and Y_kl have ten for the leading terms, fewer for the small ones.
WITHIN = {(1, 0): 3e-10, (2, 0): 3e-10, (0, 1): 3e-10, (1, 1): 3e-9, (0, 2): 3e-8}
MASSES = Masses.ame2020().with_own(FARRENQ_1991_MASSES)


def model() -> Model:
    terms = TermSet(FARRENQ_1991_Y_13C16O)
    breakdown = tuple(
        BreakdownTerm(atom, *key) for atom, table in FARRENQ_1991_DELTA.items() for key in table
    )
    return Model(Isotopologue.parse("12C16O", MASSES), terms, breakdown, masses=MASSES)


def own_constants(made: Model) -> list[Decimal]:
    """Y_kl of 12C16O and d_kl from the published U_kl and Delta_kl, in the order of the model."""
    values = []
    with localcontext(prec=30):
        electron, mu = Decimal(FARRENQ_1991_ELECTRON), made.reference.mu_exact
        mass = dict(zip(made.reference.elements, (m.value for m in made.reference.masses), strict=True))
        for item in made.constants:
            key = item.k, item.l
            scaled = Decimal(FARRENQ_1991_U[key]) * mu ** -(Decimal(item.k) / 2 + item.l)
            breakdown = {
                atom: scaled * Decimal(table[key]) * electron / mass[atom]
                for atom, table in FARRENQ_1991_DELTA.items()
                if key in table
            }
            values.append(breakdown[item.atom] if item.atom else scaled + sum(breakdown.values(), Decimal(0)))
    return values


def test_constants_of_another_isotopologue_are_the_published_ones():
    made = model()
    factors = made.mass_factors("13C16O")
    with localcontext(prec=30):
        parts = [
            value * (Decimal(float(high)) + Decimal(float(low)))
            for value, (high, low) in zip(own_constants(made), factors, strict=True)
        ]
        found = {}
        for item, part in zip(made.constants, parts, strict=True):
            found[item.k, item.l] = found.get((item.k, item.l), Decimal(0)) + part
    for key, published in FARRENQ_1991_Y_13C16O.items():
        assert float(found[key]) == pytest.approx(published, rel=WITHIN.get(key, 7e-5)), key


def test_constants_of_the_reference_are_its_own():
    made = model()
    factors = made.mass_factors("12C16O")
    for item, (high, low) in zip(made.constants, factors, strict=True):
        assert (high, low) == ((0.0, 0.0) if item.atom else (1.0, 0.0))


def test_factors_keep_thirty_digits():
    made = model()
    other = Isotopologue.parse("13C18O", MASSES)
    with localcontext(prec=40):
        rho = (made.reference.mu_exact / other.mu_exact).sqrt()
        for item, (high, low) in zip(made.constants, made.mass_factors("13C18O"), strict=True):
            expected = rho ** (item.k + 2 * item.l)
            if item.atom:
                own, its = ("12C", "13C") if item.atom == "C" else ("16O", "18O")
                expected *= Decimal(FARRENQ_1991_MASSES[own]) / Decimal(FARRENQ_1991_MASSES[its]) - 1
            assert abs((Decimal(float(high)) + Decimal(float(low))) / expected - 1) < Decimal("1e-30")
