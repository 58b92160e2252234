"""Simulated lists of an invented molecule, made without the package's own algebra.

E(v, J) = sum_kl Y_kl (v + 1/2)^k [J(J+1)]^l (J. L. Dunham, Phys. Rev. 41, 721 (1932)), with
rho^(k + 2l) [Y_kl + sum_A d_kl^A (M_A(0)/M_A(a) - 1)] for other isotopologues (form of J. K. G.
Watson, J. Mol. Spectrosc. 80, 411 (1980), from memory). The constants are near nothing measured.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from dunhamfit.lines.line_list import LineList, Source, line_columns, merge
from dunhamfit.molecule.masses import Masses
from dunhamfit.molecule.terms import TermSet

REFERENCE = "28Si32S"
TRUTH = {(1, 0): 640.0, (2, 0): -2.25, (0, 1): 0.29, (1, 1): -1.6e-3, (0, 2): -2.4e-7, (1, 2): -6e-10}
BREAKDOWN_TRUTH = {("Si", 1, 0): 0.02, ("S", 0, 1): -3e-5}
BREAKDOWN = {"Si": ["10"], "S": ["01"]}
TERMS = TermSet(TRUTH)
ATOMS = {"28Si32S": ("28Si", "32S"), "29Si32S": ("29Si", "32S"), "28Si34S": ("28Si", "34S")}


def energy(v, j, isotopologue: str = REFERENCE, truth=None, breakdown=None) -> np.ndarray:
    """Term value, cm-1."""
    masses = Masses.ame2020()
    own, other = ([float(masses[atom].value) for atom in ATOMS[name]] for name in (REFERENCE, isotopologue))
    rho = ((own[0] * own[1] / sum(own)) / (other[0] * other[1] / sum(other))) ** 0.5
    place = {"Si": 0, "S": 1}
    total = 0.0
    for (k, l), value in (TRUTH if truth is None else truth).items():
        for (atom, *kl), extra in (BREAKDOWN_TRUTH if breakdown is None else breakdown).items():
            if tuple(kl) == (k, l):
                value += extra * (own[place[atom]] / other[place[atom]] - 1)
        total = total + rho ** (k + 2 * l) * value * (v + 0.5) ** k * (j * (j + 1.0)) ** l
    return total


def band(
    name: str,
    *,
    isotopologue: str = REFERENCE,
    source: Source | None = None,
    j_max: int = 25,
    sigma=1e-4,
    truth=None,
    breakdown=None,
) -> LineList:
    """Noiseless R and P lines of one band such as "2-1"; R lines only where v' = v''."""
    v_upper, v_lower = (int(text) for text in name.split("-"))
    j = np.arange(j_max + 1)
    j_lower = np.concatenate([j, j[1:]]) if v_upper != v_lower else j
    j_upper = np.concatenate([j + 1, j[1:] - 1]) if v_upper != v_lower else j + 1
    zero = np.zeros(len(j_lower), dtype=int)
    upper = energy(v_upper, j_upper, isotopologue, truth, breakdown)
    return LineList(
        position=upper - energy(v_lower, j_lower, isotopologue, truth, breakdown),
        sigma=zero + sigma,
        v_upper=zero + v_upper,
        j_upper=j_upper,
        v_lower=zero + v_lower,
        j_lower=j_lower,
        isotopologue=zero,
        source=zero,
        file=zero,
        row=np.arange(1, len(zero) + 1),
        exclusion=zero,
        isotopologues=(isotopologue,),
        sources=(source or Source("grating"),),
    )


def campaign() -> LineList:
    """Bands of three isotopologues from two sources, noiseless."""
    grating, diode = Source("grating"), Source("diode")
    return merge(
        [
            band("0-0", source=diode, sigma=2e-6, j_max=12),
            band("1-0", source=grating),
            band("2-1", source=grating, j_max=18),
            band("2-0", source=diode, sigma=3e-5),
            band("1-0", source=grating, isotopologue="29Si32S", j_max=20),
            band("1-0", source=diode, isotopologue="28Si34S", j_max=20, sigma=5e-5),
        ]
    )


def with_columns(lines: LineList, **columns) -> LineList:
    """The same lines with some columns replaced."""
    return replace(lines, **columns)


def noisy(lines: LineList, seed: int) -> LineList:
    """The same lines with normal errors of their own sigma."""
    return with_columns(lines, position=lines.position + np.random.default_rng(seed).normal(0, lines.sigma))


def reordered(lines: LineList, order: np.ndarray) -> LineList:
    return replace(lines, **{item.name: getattr(lines, item.name)[order] for item in line_columns()})
