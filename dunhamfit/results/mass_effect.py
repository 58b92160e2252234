r"""What the uncertainties of the atomic masses do to the constants of an isotopologue.

A fit takes the masses as exact. If the mass of a nuclide were another one, the fit to the same lines
would give other constants: with A(M) c the calculated positions,

    dc/dM = -(A^T W A)^-1 A^T W (dA/dM) c

(to first order, the residuals being small), and the constants of an isotopologue would change by that
and by the change of their own mass factors. The two cancel for an isotopologue whose lines were
measured; for others something remains. Noise factors are kept as they are, which holds for changes that
leave the residuals as small as they were. The evaluated masses are taken as uncorrelated.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from dunhamfit.algebra.extended import exact
from dunhamfit.algebra.triangle import solve
from dunhamfit.fit.model import Model
from dunhamfit.fit.record import Fit
from dunhamfit.lines.line_list import LineList


@dataclass(frozen=True, eq=False)
class MassSlopes:
    """Derivatives of the parameters of a fit with respect to the masses it was made with.

    Attributes
    ----------
    nuclides : tuple of str
        Of the reference and of every isotopologue with used lines.
    parameters : ndarray of float, shape (p, nuclides), cm-1/u
    """

    nuclides: tuple[str, ...]
    parameters: np.ndarray


def mass_slopes(fit: Fit) -> MassSlopes:
    """How the constants of `fit` would follow a change of each mass."""
    model, lines, design = fit.model, fit.lines, fit.design
    # One line for each row of the design: repeats of a transition move together.
    leading = np.empty(design.rows.starts[len(fit.groups)], dtype=int)
    leading[design.row_of] = design.used
    lines = lines.subset(leading)
    names = [lines.isotopologues[code] for code in np.unique(lines.isotopologue)]
    nuclides = nuclides_of(model, names)
    changes = np.zeros((len(design.rows.scale), len(nuclides)))
    rows = monomial_rows(model, lines)
    for name in names:
        chosen = np.flatnonzero(lines.isotopologue == lines.isotopologues.index(name))
        changes[chosen] = rows[chosen] @ factor_slopes(fit, name, nuclides)
    free = np.flatnonzero(~model.fixed)
    held = np.flatnonzero(model.fixed)
    factors = np.ones(len(design.rows.lines))
    factors[: len(fit.groups)] = fit.noise.by_group
    slopes = np.zeros((len(fit.values), len(nuclides)))
    for column, change in enumerate(changes.T):
        altered = replace(design.rows, observed=exact(-change)).reweighted(factors)
        if fit.factor.shape[1] < len(free):
            # Relations between constants: the lines act only along the directions that these leave.
            gradient = altered.gradient(altered.observed)
            slopes[:, column] = fit.factor @ (fit.factor.T @ gradient)
        else:
            slopes[free, column] = solve(altered.held(held, np.zeros(len(held))).triangle())
    return MassSlopes(nuclides, slopes)


def nuclides_of(model: Model, names) -> tuple[str, ...]:
    """Nuclides of the reference and of the isotopologues `names`, each once."""
    found = list(model.reference.nuclides)
    for name in names:
        found += model.isotopologue(name).nuclides
    return tuple(dict.fromkeys(found))


def factor_slopes(fit: Fit, name: str, nuclides: tuple[str, ...]) -> np.ndarray:
    """Derivatives of the Y_kl of isotopologue `name` at fixed constants, shape (terms, nuclides), cm-1/u.

    d ln(rho)/dM = (d ln(mu_0)/dM - d ln(mu_a)/dM)/2; a breakdown term adds d (M_A(0)/M_A(a))/dM.
    """
    model = fit.model
    other, reference = model.isotopologue(name), model.reference
    place = {nuclide: index for index, nuclide in enumerate(nuclides)}
    rho = np.zeros(len(nuclides))
    quotient = {atom: np.zeros(len(nuclides)) for atom in reference.elements}
    for i, atom in enumerate(reference.elements):
        rho[place[reference.nuclides[i]]] += reference.mu_gradient[i] / 2
        rho[place[other.nuclides[i]]] -= other.mu_gradient[i] / 2
        own, first = float(other.masses[i].value), float(reference.masses[i].value)
        quotient[atom][place[reference.nuclides[i]]] += 1 / own
        quotient[atom][place[other.nuclides[i]]] -= first / own**2
    row = {(term.k, term.l): index for index, term in enumerate(model.terms)}
    factors = model.mass_factors(name)[:, 0]
    slopes = np.zeros((len(model.terms), len(nuclides)))
    for index, item in enumerate(fit.constants):
        value = fit.values[index]
        slopes[row[item.k, item.l]] += value * factors[index] * (item.k + 2 * item.l) * rho
        if item.atom:
            scale = factors[fit.index(item.k, item.l)]
            slopes[row[item.k, item.l]] += value * scale * quotient[item.atom]
    return slopes


def monomials(model: Model, v: np.ndarray, j: np.ndarray) -> np.ndarray:
    """(v + 1/2)^k [J(J + 1)]^l for each term, shape (levels, terms)."""
    k, l = np.array([(term.k, term.l) for term in model.terms]).T
    return (v[:, None] + 0.5) ** k * (j * (j + 1.0))[:, None] ** l


def monomial_rows(model: Model, lines: LineList) -> np.ndarray:
    """Differences of the monomials of the upper and the lower level, shape (lines, terms)."""
    return monomials(model, lines.v_upper, lines.j_upper) - monomials(model, lines.v_lower, lines.j_lower)
