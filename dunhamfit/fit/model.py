"""The model of a fit: which parameters there are, in which order, and what scales them.

Parameters stand in the order terms (by l, then k), breakdown terms, calibration terms.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from decimal import Decimal, localcontext
from functools import cached_property
from types import MappingProxyType

import numpy as np

from dunhamfit.errors import UsageError
from dunhamfit.lines.line_list import Source
from dunhamfit.molecule.isotopologue import DIGITS, Isotopologue, breakdown_factor, check_same_molecule, mass_ratio
from dunhamfit.molecule.masses import Masses
from dunhamfit.molecule.terms import BreakdownTerm, Term, TermSet


@dataclass(frozen=True)
class Parameter:
    """One parameter of the linear model.

    Attributes
    ----------
    name : str
        Such as `Y10`, `d10_C`, `offset[furnace]`.
    kind : "term", "breakdown", "offset" or "scale"
    unit : str
        "cm-1", or "1" for a scale.
    k, l : int
        Indices of a term or breakdown term; -1 for calibration terms.
    atom : str
        Element symbol of a breakdown term, else empty.
    source : str
        Source of a calibration term, else empty.
    """

    name: str
    kind: str
    unit: str
    k: int = -1
    l: int = -1
    atom: str = ""
    source: str = ""


@dataclass(frozen=True)
class Prior:
    """A Gaussian prior of one parameter; a sigma of 0 fixes it, an infinite one leaves it free."""

    value: float
    sigma: float
    origin: str = ""


@dataclass(frozen=True, eq=False)
class Model:
    """Terms, breakdown terms and calibration terms of one molecule.

    Attributes
    ----------
    reference : Isotopologue
        Whose Y_kl the terms are.
    terms : TermSet
    breakdown : tuple of BreakdownTerm
    calibration : tuple of Source
        Sources with a shared offset or scale error.
    priors : mapping from parameter name to Prior
        Of terms and breakdown terms; those of calibration terms are the sources' own.
    masses : Masses
    """

    reference: Isotopologue
    terms: TermSet
    breakdown: tuple[BreakdownTerm, ...] = ()
    calibration: tuple[Source, ...] = ()
    priors: MappingProxyType = field(default_factory=lambda: MappingProxyType({}))
    masses: Masses = field(default_factory=Masses.ame2020)

    def __post_init__(self):
        for term in self.breakdown:
            if term.atom not in self.reference.elements:
                raise UsageError(
                    f"breakdown term {term.name}: {self.reference.name} has no atom {term.atom} "
                    f"(its atoms are {', '.join(dict.fromkeys(self.reference.elements))})"
                )
            if Term(term.k, term.l) not in self.terms:
                raise UsageError(
                    f"breakdown term {term.name} belongs to {Term(term.k, term.l).name}, "
                    "which is not among the terms; add it"
                )
        constants = {item.name for item in self.constants}
        for name in self.priors:
            if name not in constants:
                raise UsageError(
                    f"'{name}' is fixed but is not a term of the model ({', '.join(sorted(constants))})"
                )

    @cached_property
    def constants(self) -> tuple[Parameter, ...]:
        """Terms and breakdown terms."""
        terms = tuple(Parameter(term.name, "term", "cm-1", term.k, term.l) for term in self.terms)
        breakdown = tuple(
            Parameter(term.name, "breakdown", "cm-1", term.k, term.l, term.atom)
            for term in sorted(self.breakdown, key=lambda t: (t.atom, t.l, t.k))
        )
        return terms + breakdown

    @cached_property
    def parameters(self) -> tuple[Parameter, ...]:
        """All parameters, in the order of every array that is indexed by parameter."""
        calibration = []
        for source in self.calibration:
            for kind, unit in (("offset", "cm-1"), ("scale", "1")):
                if getattr(source, kind) is not None:
                    calibration.append(Parameter(f"{kind}[{source.name}]", kind, unit, source=source.name))
        return self.constants + tuple(calibration)

    @cached_property
    def names(self) -> tuple[str, ...]:
        return tuple(item.name for item in self.parameters)

    def prior(self, parameter: Parameter) -> Prior | None:
        """The prior of a parameter, None where it is free."""
        return self._all_priors.get(parameter.name)

    @cached_property
    def _all_priors(self) -> Mapping[str, Prior]:
        """Priors of all parameters that are not free, those of calibration terms included."""
        calibration = {
            f"{kind}[{source.name}]": Prior(0.0, sigma)
            for source in self.calibration
            for kind, sigma in (("offset", source.offset), ("scale", source.scale))
            if sigma is not None
        }
        given = {**self.priors, **calibration}
        return {name: prior for name, prior in given.items() if np.isfinite(prior.sigma)}

    @cached_property
    def fixed(self) -> np.ndarray:
        """Mask of the parameters whose value is given, shape (p,)."""
        priors = [self.prior(item) for item in self.parameters]
        return np.array([prior is not None and prior.sigma == 0 for prior in priors])

    def isotopologue(self, name: str) -> Isotopologue:
        """Another isotopologue of the molecule, by name."""
        return Isotopologue.parse(name, self.masses)

    def knows(self, name: str) -> bool:
        """Whether `name` is an isotopologue of this molecule; lines left out may bear any name."""
        try:
            check_same_molecule(self.reference, self.isotopologue(name))
        except UsageError:
            return False
        return True

    def mass_factors(self, name: str) -> np.ndarray:
        """Factor of each constant in isotopologue `name`, shape (constants, 2): high and low part.

        rho^(k + 2l) for a term, times M_A(0)/M_A(a) - 1 for a breakdown term.
        """
        known = self._known_factors
        if name not in known:
            known[name] = _mass_factors(self.reference, self.isotopologue(name), self.constants)
        return known[name]

    @cached_property
    def _known_factors(self) -> dict[str, np.ndarray]:
        return {}


def _mass_factors(
    reference: Isotopologue, other: Isotopologue, constants: tuple[Parameter, ...]
) -> np.ndarray:
    rho = mass_ratio(reference, other)
    factors = np.empty((len(constants), 2))
    with localcontext(prec=DIGITS):
        powers = {power: rho**power for power in {constant.k + 2 * constant.l for constant in constants}}
        for index, constant in enumerate(constants):
            factor = powers[constant.k + 2 * constant.l]
            if constant.atom:
                factor = factor * breakdown_factor(reference, other, constant.atom)
            high = float(factor)
            factors[index] = high, float(factor - Decimal(high))
    factors.flags.writeable = False
    return factors
