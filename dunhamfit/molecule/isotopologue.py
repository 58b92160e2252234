r"""Isotopologues of a diatomic molecule: names, reduced masses and the factors that scale constants.

Reduced mass of a molecule of charge Q from the masses of the neutral atoms, with the
charge-modified form for ions,

    mu = M_A M_B / (M_A + M_B - Q m_e),

J. K. G. Watson, J. Mol. Spectrosc. 80, 411 (1980), doi:10.1016/0022-2852(80)90152-6. A
neutral molecule has the usual mu = M_A M_B / (M_A + M_B).
"""

from __future__ import annotations

import re
import unicodedata
from dataclasses import dataclass
from decimal import Decimal, localcontext

from dunhamfit.errors import UsageError
from dunhamfit.molecule.masses import (
    ELECTRON_MASS_U,
    HYDROGEN_SYMBOLS,
    Mass,
    Masses,
    as_shown,
    element_of,
    nuclide_name,
)

# Far beyond any mass; enough that no later rounding to extended precision is felt.
DIGITS = 40

_ATOM = r"([1-9][0-9]{0,2}[A-Z][a-z]?|[HDT](?![a-z]))"
_NAME = re.compile(_ATOM + _ATOM + r"(?:([2-9]?)([+-]))?")
_EXPECTED = "Expected two atoms with their mass numbers, and the charge of an ion, such as 28Si32S or 12C1H+."


@dataclass(frozen=True)
class Isotopologue:
    """One isotopologue of a diatomic molecule.

    Attributes
    ----------
    name : str
        As the user wrote it; `formula` is the same for every way of writing.
    nuclides : (str, str)
        Such as `("28Si", "32S")`.
    masses : (Mass, Mass)
        Of the neutral atoms.
    charge : int
        In units of the elementary charge.
    """

    name: str
    nuclides: tuple[str, str]
    masses: tuple[Mass, Mass]
    charge: int = 0

    @classmethod
    def parse(cls, name: str, masses: Masses) -> Isotopologue:
        """The isotopologue called `name`, such as `28Si32S`, `D35Cl` or `12C1H+`.

        Raises
        ------
        UsageError
            For a name that is not recognised, with what may have been meant.
        """
        name = name.strip() if isinstance(name, str) else name
        found = _split(name, masses)
        if found is None:
            raise UsageError(_not_recognised(name, masses))
        nuclides, charge = found
        return cls(name, nuclides, (masses[nuclides[0]], masses[nuclides[1]]), charge)

    @property
    def elements(self) -> tuple[str, str]:
        return element_of(self.nuclides[0]), element_of(self.nuclides[1])

    @property
    def formula(self) -> str:
        """Name with mass numbers everywhere, such as `1H35Cl+` for `H35Cl+`."""
        return "".join(self.nuclides) + charge_text(self.charge)

    @property
    def mu_exact(self) -> Decimal:
        """Reduced mass with 40 digits, u. Calculate on with it inside `decimal.localcontext(prec=40)`."""
        first, second = (mass.value for mass in self.masses)
        with localcontext(prec=DIGITS):
            return first * second / (first + second - self.charge * ELECTRON_MASS_U)

    @property
    def mu(self) -> float:
        """Reduced mass, u."""
        return float(self.mu_exact)

    @property
    def mu_gradient(self) -> tuple[float, float]:
        """d ln(mu) / dM_A and d ln(mu) / dM_B, 1/u, each atom by itself."""
        first, second = (mass.value for mass in self.masses)
        with localcontext(prec=DIGITS):
            whole = 1 / (first + second - self.charge * ELECTRON_MASS_U)
            return float(1 / first - whole), float(1 / second - whole)

    @property
    def mu_sigma(self) -> float:
        """1 sigma of the reduced mass from those of the atomic masses, u.

        Two atoms of one nuclide err together; the masses of two nuclides are taken as uncorrelated.
        """
        parts = [slope * mass.sigma for slope, mass in zip(self.mu_gradient, self.masses, strict=True)]
        same = self.nuclides[0] == self.nuclides[1]
        return self.mu * (abs(sum(parts)) if same else (parts[0] ** 2 + parts[1] ** 2) ** 0.5)


def mass_ratio(reference: Isotopologue, other: Isotopologue) -> Decimal:
    """rho = sqrt(mu_0 / mu_a) of `other` (a) against `reference` (0), with 40 digits.

    Raises
    ------
    UsageError
        Where the two are not isotopologues of one molecule.
    """
    check_same_molecule(reference, other)
    with localcontext(prec=DIGITS):
        return (reference.mu_exact / other.mu_exact).sqrt()


def breakdown_factor(reference: Isotopologue, other: Isotopologue, atom: str) -> Decimal:
    """Sum of M_A(0)/M_A(a) - 1 over the atoms of the element `atom`, with 40 digits.

    Both atoms of a homonuclear molecule count: its breakdown is the same function for each.

    Raises
    ------
    UsageError
        Where the two are not isotopologues of one molecule, or the molecule has no such atom.
    """
    check_same_molecule(reference, other)
    places = [place for place, element in enumerate(reference.elements) if element == atom]
    if not places:
        known = " and ".join(reference.elements)
        raise UsageError(f"{reference.name} has no atom '{as_shown(atom)}'; its atoms are {known}")
    with localcontext(prec=DIGITS):
        return sum((reference.masses[i].value / other.masses[i].value - 1 for i in places), Decimal(0))


def check_same_molecule(reference: Isotopologue, other: Isotopologue) -> None:
    """Raise UsageError unless both have the same elements in the same order, and the same charge."""
    if reference.elements == other.elements and reference.charge == other.charge:
        return
    if reference.charge != other.charge:
        why = f"its charge is {other.charge:+d}, not {reference.charge:+d}"
    elif reference.elements == other.elements[::-1]:
        turned = "".join(other.nuclides[::-1]) + charge_text(other.charge)
        why = f"write the atoms in the same order: {turned}"
    else:
        why = f"its atoms are {' and '.join(other.elements)}, not {' and '.join(reference.elements)}"
    raise UsageError(f"{other.name} is not an isotopologue of the same molecule as {reference.name}: {why}")


def charge_text(charge: int) -> str:
    """Charge as it stands in a name: nothing, `+`, `-`, `2+`."""
    if charge == 0:
        return ""
    return ("" if abs(charge) == 1 else str(abs(charge))) + ("+" if charge > 0 else "-")


def _split(name: object, masses: Masses) -> tuple[tuple[str, str], int] | None:
    """Nuclides and charge, or None where the name is not one of this table."""
    match = _NAME.fullmatch(name) if isinstance(name, str) else None
    if match is None:
        return None
    nuclides = nuclide_name(match[1]), nuclide_name(match[2])
    if not all(nuclide in masses for nuclide in nuclides):
        return None
    return nuclides, int((match[4] or "+") + (match[3] or "1")) if match[4] else 0


def _not_recognised(name: object, masses: Masses) -> str:
    guesses, elements = _readings(name, masses)
    parts = [f'"{as_shown(name)}" not recognised.']
    if guesses:
        parts.append(f"Did you mean {' or '.join(guesses[:3])}?")
    if elements:
        known = "; ".join(", ".join(masses.isotopes(element)) for element in elements)
        parts.append(f"Known isotopes: {known}. Others can be defined with a mass of their own.")
    else:
        parts.append(_EXPECTED)
    return " ".join(parts)


def _readings(name: object, masses: Masses) -> tuple[list[str], list[str]]:
    """Names that may have been meant, and the elements in question, from every way to read `name`."""
    plain = unicodedata.normalize("NFKC", str(name)[:40]).replace("\u2212", "-")
    plain = re.sub(r"[\s()\[\]{}^_,.]", "", plain)
    match = re.fullmatch(r"(.*?)((?:[2-9]?[+-])?)", plain)
    body, charges = re.sub(r"[+-]", "", match[1]), [match[2]]
    bodies = [body]
    if match[2] and match[2][0].isdigit():  # "12C16O2+" is a charge of 2, "14N2+" two atoms of charge 1
        bodies.append(body + match[2][0])
        charges.append(match[2][1:])
    guesses: list[str] = []
    elements: list[str] = []
    for text, charge in zip(bodies, charges, strict=True):
        for atoms in _atom_pairs(text):
            if not all(masses.isotopes(_element(symbol)) for symbol, _ in atoms):
                continue
            elements = elements or list(dict.fromkeys(_element(symbol) for symbol, _ in atoms))
            nuclides = [_meant(symbol, number, masses) for symbol, number in atoms]
            guess = "".join(nuclides) + charge
            if all(nuclides) and guess not in guesses:
                guesses.append(guess)
    return guesses, elements


def _atom_pairs(text: str):
    """Every way to read `text` as two (symbol, mass number or ""); symbols in their proper case first."""
    found = []
    for first in (2, 1):
        for second in (2, 1):
            a, b = f"([A-Za-z]{{{first}}})", f"([A-Za-z]{{{second}}})"
            if match := re.fullmatch(rf"(\d*){a}(\d*){b}", text):
                found.append(((match[2], match[1]), (match[4], match[3])))
            if match := re.fullmatch(rf"{a}(\d*){b}(\d*)", text):
                found.append(((match[1], match[2]), (match[3], match[4])))
        if match := re.fullmatch(rf"(\d*)([A-Za-z]{{{first}}})2", text):
            found.append(((match[2], match[1]),) * 2)
    return sorted(found, key=lambda atoms: any(symbol != symbol.capitalize() for symbol, _ in atoms))


def _element(symbol: str) -> str:
    symbol = symbol.capitalize()
    return "H" if symbol in HYDROGEN_SYMBOLS else symbol


def _meant(symbol: str, number: str, masses: Masses) -> str:
    """The nuclide meant, the most abundant where the mass number is missing; empty where there is none."""
    symbol = symbol.capitalize()
    if not number:
        return HYDROGEN_SYMBOLS.get(symbol) or masses.isotopes(symbol)[0]
    nuclide = f"{int(number)}{symbol}"
    return nuclide if nuclide in masses else ""
