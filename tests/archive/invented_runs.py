"""Fits to store: a line list of an invented molecule, with everything a run can have.

The molecule bears the name of germanium monoselenide; its constants and errors are made up.
E(v, J) = sum_kl Y_kl (v + 1/2)^k [J(J+1)]^l (J. L. Dunham, Phys. Rev. 41, 721 (1932)).
"""

from __future__ import annotations

import numpy as np

from dunhamfit.fit.model import Prior
from dunhamfit.fit.record import Fit
from dunhamfit.fit.solve import fit_lines
from dunhamfit.lines.line_list import LineList, Source, merge
from dunhamfit.molecule.masses import Masses
from dunhamfit.molecule.terms import TermSet

CONSTANTS = {(1, 0): 407.5, (2, 0): -0.91, (0, 1): 0.0963, (1, 1): -2.9e-4, (0, 2): -2.2e-8}
REFERENCE, OTHER = "74Ge80Se", "72Ge80Se"
TERMS = TermSet.from_orders([2, 1, 0])


def source_lines(
    source: Source, *bands: str, j_max: int = 25, sigma: float = 1e-4, isotopologue: str = REFERENCE, seed: int = 1
) -> LineList:
    """Noisy lines of one source; the constants are those of the isotopologue itself, which is enough here."""
    rows = []
    for band in bands:
        upper, lower = (int(text) for text in band.split("-"))
        rows += [(upper, j + step, lower, j) for j in range(j_max + 1) for step in (1, -1) if j + step >= 0]
    v_upper, j_upper, v_lower, j_lower = np.array(rows).T
    zero = np.zeros(len(rows), dtype=int)
    exact = _energy(v_upper, j_upper) - _energy(v_lower, j_lower)
    return LineList(
        position=exact + np.random.default_rng(seed).normal(0.0, sigma, len(rows)),
        sigma=np.full(len(rows), sigma),
        v_upper=v_upper,
        j_upper=j_upper,
        v_lower=v_lower,
        j_lower=j_lower,
        isotopologue=zero,
        source=zero,
        file=zero,
        row=np.arange(2, len(rows) + 2),
        exclusion=zero,
        isotopologues=(isotopologue,),
        sources=(source,),
    )


def all_lines() -> LineList:
    """Two sources, three bands, two isotopologues, lines left out for two reasons, a shared offset and a free scale."""
    old = source_lines(Source("oven", ("oven.csv",), ("ab" * 32,), offset=1e-5), "1-0", "2-1")
    new = source_lines(Source("jet", ("jet\u0301 1.csv",), ("cd" * 32,), "MHz", 2.0, scale=np.inf), "2-0", seed=2)
    rare = source_lines(old.sources[0], "1-0", isotopologue=OTHER, seed=3, j_max=5)
    lines = merge([old, new, rare.excluded(np.ones(len(rare), dtype=bool), "another isotopologue")])
    return lines.excluded(lines.j_lower == 13, "blended in every band")


def one_fit(policy: str = "per-source", lines: LineList | None = None) -> Fit:
    """A fit with a fixed term, a prior, calibration terms and a mass of the user's own."""
    return fit_lines(
        all_lines() if lines is None else lines,
        TermSet([*TERMS, (1, 2)]),
        reference=REFERENCE,
        priors={"Y12": Prior(-1e-11, 0.0, "an invented paper"), "Y02": Prior(-2.2e-8, 1e-9)},
        policy=policy,
        masses=Masses.ame2020().with_own({"72Ge": ("71.922075827", 1e-9)}),
    )


def _energy(v, j):
    return sum(value * (v + 0.5) ** k * (j * (j + 1.0)) ** l for (k, l), value in CONSTANTS.items())
