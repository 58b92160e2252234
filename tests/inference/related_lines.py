"""Lines of an invented molecule, and the design of their constants written out with nothing of dunhamfit.

E(v, J) = sum Y_kl (v + 1/2)^k (J(J+1))^l: J. L. Dunham, Phys. Rev. 41, 721 (1932).
"""

from __future__ import annotations

import numpy as np

from dunhamfit.fit.model import Model, Prior
from dunhamfit.fit.solve import make_model
from dunhamfit.lines.line_list import LineList, Source
from dunhamfit.molecule.terms import TermSet

NAMES = ("Y10", "Y20", "Y01", "Y11", "Y02")
TRUTH = np.array([701.25, -2.75, 0.3125, -0.0015, -4 * 0.3125**3 / 701.25**2])
SIGMA = 1e-4


def columns(v, j) -> np.ndarray:
    """Derivatives of a level with respect to the constants of NAMES, shape (n, 5)."""
    x, y = v + 0.5, j * (j + 1.0)
    return np.column_stack([x, x**2, y, x * y, y**2])


def design(lines: LineList) -> np.ndarray:
    """The same of the positions, shape (n, 5)."""
    return columns(lines.v_upper, lines.j_upper) - columns(lines.v_lower, lines.j_lower)


def noisy_lines(*, bands=((1, 0), (2, 1), (3, 2)), j_max: int = 40, seed: int = 1) -> LineList:
    """R and P lines with errors of SIGMA."""
    j = np.arange(1, j_max + 1)
    rows = [(np.full_like(j, u), np.full_like(j, low), j + b, j) for u, low in bands for b in (1, -1)]
    v_upper, v_lower, j_upper, j_lower = (np.concatenate(column) for column in zip(*rows, strict=True))
    count = len(v_upper)
    zero = np.zeros(count, dtype=int)
    exact = (columns(v_upper, j_upper) - columns(v_lower, j_lower)) @ TRUTH
    return LineList(
        position=exact + SIGMA * np.random.default_rng(seed).standard_normal(count),
        sigma=np.full(count, SIGMA),
        v_upper=v_upper,
        j_upper=j_upper,
        v_lower=v_lower,
        j_lower=j_lower,
        isotopologue=zero,
        source=zero,
        file=zero,
        row=np.arange(1, count + 1),
        exclusion=zero,
        isotopologues=("28Si32S",),
        sources=(Source("oven"),),
    )


def model_of(lines: LineList, *, priors: dict[str, Prior] | None = None, names=NAMES) -> Model:
    return make_model(lines, TermSet.from_names(list(names)), reference="28Si32S", priors=priors or {})
