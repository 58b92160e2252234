"""Lines of an invented molecule that bears the name of germanium monoselenide; every number is made up.

E(v, J) = sum_kl Y_kl (v + 1/2)^k [J(J+1)]^l with the mass scaling of `dunhamfit.molecule.terms`, written
out here once more in plain floats: good to 1e-13 of a position, far below the noise.
"""

from __future__ import annotations

import numpy as np

from dunhamfit.lines.line_list import LineList, Source, merge
from dunhamfit.molecule.masses import Masses
from dunhamfit.molecule.terms import TermSet

REFERENCE = "74Ge80Se"
CONSTANTS = {
    (1, 0): 407.512, (2, 0): -0.9063, (3, 0): 4.1e-4, (0, 1): 0.0962998, (1, 1): -2.91e-4, (2, 1): 2.7e-7,
    (0, 2): -2.151e-8, (1, 2): -1.7e-11,
}  # fmt: skip
# d_kl^A in cm-1.
BREAKDOWN_CONSTANTS = {("Ge", 1, 0): 4.0e-3, ("Ge", 0, 1): -2.6e-6, ("Se", 1, 0): -2.2e-3, ("Se", 0, 1): -2.4e-6}
BREAKDOWN = {"Ge": ["10", "01"], "Se": ["10", "01"]}
TERMS = TermSet(CONSTANTS)
ISOTOPOLOGUES = (REFERENCE, "72Ge80Se", "76Ge80Se", "74Ge78Se", "74Ge82Se")


def constants_of(name: str) -> dict[tuple[int, int], float]:
    """Y_kl of an isotopologue such as `72Ge78Se`, by the mass scaling."""
    masses = Masses.ame2020()
    reference, own = [[float(masses[x].value) for x in (n[:4], n[4:])] for n in (REFERENCE, name)]
    rho = np.sqrt(np.prod(reference) / sum(reference) / (np.prod(own) / sum(own)))
    found = {}
    for (k, l), value in CONSTANTS.items():
        for place, atom in enumerate(("Ge", "Se")):
            value += BREAKDOWN_CONSTANTS.get((atom, k, l), 0.0) * (reference[place] / own[place] - 1)
        found[k, l] = rho ** (k + 2 * l) * value
    return found


def energy(name: str, v, j) -> np.ndarray:
    """E(v, J) in cm-1."""
    v, j = np.asarray(v, dtype=float), np.asarray(j, dtype=float)
    return sum(y * (v + 0.5) ** k * (j * (j + 1)) ** l for (k, l), y in constants_of(name).items())


def simulated_lines(
    *, seed: int, sigma: float = 2e-4, j_max: int = 40, bands=("1-0", "2-1", "2-0", "3-1"), offset: float | None = None,
    isotopologues=ISOTOPOLOGUES, scatter: bool = True,
) -> LineList:  # fmt: skip
    """R and P lines of every band and isotopologue; two sources, the second with a shared offset of prior `offset`."""
    rng = np.random.default_rng(seed)
    sources = (Source("oven"), Source("jet", offset=offset))
    shift = (0.0, rng.normal(0.0, offset) if offset else 0.0)
    parts = []
    for code, name in enumerate(isotopologues):
        for number, band in enumerate(bands):
            v_upper, v_lower = (int(text) for text in band.split("-"))
            pairs = [(j + s, j) for j in range(j_max + 1) for s in (1, -1) if j + s >= 0]
            j_upper, j_lower = np.array(pairs).T
            count, which = len(pairs), number % 2
            exact = energy(name, v_upper, j_upper) - energy(name, v_lower, j_lower)
            noise = rng.normal(0.0, sigma, count) if scatter else 0.0
            parts.append(
                LineList(
                    position=exact + shift[which] + noise,
                    sigma=np.full(count, sigma),
                    v_upper=np.full(count, v_upper),
                    j_upper=j_upper,
                    v_lower=np.full(count, v_lower),
                    j_lower=j_lower,
                    isotopologue=np.full(count, code),
                    source=np.full(count, which),
                    file=np.zeros(count),
                    row=np.arange(1, count + 1),
                    exclusion=np.zeros(count),
                    isotopologues=isotopologues,
                    sources=sources,
                )
            )
    return merge(parts)
