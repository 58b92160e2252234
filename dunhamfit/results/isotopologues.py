r"""Constants of any isotopologue of a molecule, measured or not, and the mass-independent constants.

    Y_kl(a) = rho^(k + 2l) [ Y_kl + sum_A d_kl^A (M_A(0)/M_A(a) - 1) ],      rho = sqrt(mu_0/mu_a)
    U_kl = mu_0^(k/2 + l) ( Y_kl - sum_A d_kl^A )
    Delta_kl^A = d_kl^A M_A(0) / [ m_e ( Y_kl - sum_A d_kl^A ) ]

so that Y_kl(a) = mu_a^-(k/2 + l) U_kl [1 + m_e sum_A Delta_kl^A / M_A(a)] (A. H. M. Ross, R. S. Eng and
H. Kildal, Opt. Commun. 12, 433 (1974); P. R. Bunker, J. Mol. Spectrosc. 68, 367 (1977); J. K. G. Watson,
J. Mol. Spectrosc. 80, 411 (1980); from memory). In a molecule of two equal atoms the sum takes both.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from dunhamfit.errors import UsageError
from dunhamfit.fit.record import Fit
from dunhamfit.molecule.isotopologue import Isotopologue
from dunhamfit.molecule.masses import ELECTRON_MASS_U
from dunhamfit.molecule.terms import Term, TermSet
from dunhamfit.results.mass_effect import factor_slopes, mass_slopes, nuclides_of

# A Delta closer to zero than this many sigma is said not to be determined.
LEAST_T = 2.0


@dataclass(frozen=True, eq=False)
class OwnConstants:
    """Y_kl of one isotopologue.

    Attributes
    ----------
    isotopologue : Isotopologue
    terms : TermSet
    values : ndarray of float, shape (terms,), cm-1
    factor : ndarray of float, shape (terms, q), cm-1
        F with covariance F F^T, from the lines.
    mass_factor : ndarray of float, shape (terms, nuclides), cm-1
        The same for what the uncertainties of the atomic masses add.
    nuclides : tuple of str
    """

    isotopologue: Isotopologue
    terms: TermSet
    values: np.ndarray
    factor: np.ndarray
    mass_factor: np.ndarray
    nuclides: tuple[str, ...]

    @cached_property
    def covariance(self) -> np.ndarray:
        """Of `values`, masses included, shape (terms, terms), cm-2."""
        return self.factor @ self.factor.T + self.mass_factor @ self.mass_factor.T

    @cached_property
    def sigmas(self) -> np.ndarray:
        """1 sigma of `values`, masses included, shape (terms,), cm-1."""
        return np.hypot(self.fit_sigmas, self.mass_sigmas)

    @property
    def fit_sigmas(self) -> np.ndarray:
        """The part of the lines, shape (terms,), cm-1."""
        return np.sqrt((self.factor**2).sum(axis=1))

    @property
    def mass_sigmas(self) -> np.ndarray:
        """The part of the atomic masses, shape (terms,), cm-1."""
        return np.sqrt((self.mass_factor**2).sum(axis=1))

    def index(self, k: int, l: int) -> int | None:
        """Place of Y_kl; None where the fit has no such term."""
        return self.terms.index(Term(k, l)) if Term(k, l) in self.terms else None


@dataclass(frozen=True, eq=False)
class MassIndependent:
    """U_kl and Delta_kl^A of a fit, with their covariance.

    Attributes
    ----------
    names : tuple of str
        `U10`, ...; `Delta10_C`, ...
    kinds : tuple of "U" or "Delta"
    k, l : ndarray of int, shape (n,)
    atoms : tuple of str
        Empty for U.
    values, sigmas : ndarray of float, shape (n,)
        U in cm-1 u^(k/2 + l); Delta is a number.
    covariance : ndarray of float, shape (n, n)
        Of the lines; the masses' part, far smaller, is in none of these.
    """

    names: tuple[str, ...]
    kinds: tuple[str, ...]
    k: np.ndarray
    l: np.ndarray
    atoms: tuple[str, ...]
    values: np.ndarray
    sigmas: np.ndarray
    covariance: np.ndarray

    def value(self, name: str) -> float:
        """Value by name.

        Raises
        ------
        UsageError
            If there is none of that name.
        """
        return float(self.values[self._place(name)])

    def sigma(self, name: str) -> float:
        """1 sigma by name."""
        return float(self.sigmas[self._place(name)])

    def not_determined(self) -> tuple[str, ...]:
        """Names of the Delta within 2 sigma of zero: the lines hardly tell them from none at all."""
        return tuple(
            name
            for name, kind, value, sigma in zip(self.names, self.kinds, self.values, self.sigmas, strict=True)
            if kind == "Delta" and abs(value) < LEAST_T * sigma
        )

    def _place(self, name: str) -> int:
        if name not in self.names:
            raise UsageError(f"{name} is not among {', '.join(self.names)}")
        return self.names.index(name)


def own_constants(fit: Fit, isotopologue: str | None = None) -> OwnConstants:
    """Y_kl of an isotopologue, by default the reference.

    Raises
    ------
    UsageError
        If it is no isotopologue of the fit's molecule.
    """
    model = fit.model
    name = isotopologue or model.reference.name
    factors = model.mass_factors(name)[:, 0]
    row = {(term.k, term.l): index for index, term in enumerate(model.terms)}
    scaling = np.zeros((len(model.terms), len(fit.constants)))
    for column, item in enumerate(fit.constants):
        scaling[row[item.k, item.l], column] = factors[column]
    count = len(fit.constants)
    by_mass = mass_slopes(fit)
    nuclides = tuple(dict.fromkeys((*by_mass.nuclides, *nuclides_of(model, [name]))))
    slopes = factor_slopes(fit, name, nuclides)
    slopes[:, : len(by_mass.nuclides)] += scaling @ by_mass.parameters[:count]
    sigmas = np.array([model.masses[nuclide].sigma for nuclide in nuclides])
    return OwnConstants(
        isotopologue=model.isotopologue(name),
        terms=model.terms,
        values=scaling @ fit.values[:count],
        factor=scaling @ fit.factor[:count],
        mass_factor=slopes * sigmas,
        nuclides=nuclides,
    )


def mass_independent(fit: Fit) -> MassIndependent:
    """U_kl for every term, and Delta_kl^A for every breakdown term.

    Raises
    ------
    UsageError
        Where the reference has two different isotopes of one element and breakdown terms of it: the
        terms then belong to no single Delta. Take another reference.
    """
    model = fit.model
    reference = model.reference
    atoms = {term.atom for term in model.breakdown}
    if len(set(reference.nuclides)) == 2 and reference.elements[0] == reference.elements[1] and atoms:
        raise UsageError(
            f"U and Delta need a reference whose two atoms are one nuclide or two elements (got {reference.name})"
        )
    count = len(fit.constants)
    rows, names, kinds, k, l, of_atom, values = [], [], [], [], [], [], []
    for term in model.terms:
        # Y - sum_A d_A, which is what remains where every mass is infinite, is linear in the constants.
        bare = np.zeros(count)
        bare[fit.index(term.k, term.l)] = 1.0
        concerned = [item for item in fit.constants if item.atom and (item.k, item.l) == (term.k, term.l)]
        for item in concerned:
            bare[fit.index(item.k, item.l, item.atom)] -= reference.elements.count(item.atom)
        scale = reference.mu ** (term.k / 2 + term.l)
        core = float(bare @ fit.values[:count])
        entries = [(term.name.replace("Y", "U"), "U", "", scale * core, scale * bare)]
        for item in concerned:
            mass = float(reference.masses[reference.elements.index(item.atom)].value) / float(ELECTRON_MASS_U)
            d = fit.value(item.k, item.l, item.atom)
            slope = -d / core**2 * bare
            slope[fit.index(item.k, item.l, item.atom)] += 1 / core
            entries.append((item.name.replace("d", "Delta", 1), "Delta", item.atom, mass * d / core, mass * slope))
        for name, kind, atom, value, slope in entries:
            names.append(name)
            kinds.append(kind)
            of_atom.append(atom)
            k.append(term.k)
            l.append(term.l)
            values.append(value)
            rows.append(slope)
    factor = np.array(rows) @ fit.factor[:count]
    order = sorted(range(len(names)), key=lambda i: (kinds[i] != "U", of_atom[i], l[i], k[i]))
    factor = factor[order]
    return MassIndependent(
        names=tuple(names[i] for i in order),
        kinds=tuple(kinds[i] for i in order),
        k=np.array(k)[order],
        l=np.array(l)[order],
        atoms=tuple(of_atom[i] for i in order),
        values=np.array(values)[order],
        sigmas=np.sqrt((factor**2).sum(axis=1)),
        covariance=factor @ factor.T,
    )
