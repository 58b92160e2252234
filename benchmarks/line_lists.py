"""Line lists to measure with: the real one of the reference folder, or an invented one of the same size."""

from __future__ import annotations

import warnings
from pathlib import Path

import numpy as np

from dunhamfit.errors import DunhamfitWarning
from dunhamfit.lines.line_list import LineList, Source
from dunhamfit.lines.reading import read_lines
from dunhamfit.molecule.terms import TermSet

REAL_LIST = Path(__file__).resolve().parents[2] / "shared" / "reference" / "co_hitran2016_6iso.par"
# Highest k for l = 0 .. 4: 24 terms.
TERMS = TermSet.from_orders([7, 5, 4, 3, 1])
_BANDS = (*((v + step, v) for step in (1, 2, 3) for v in range(8 - step)), (0, 0), (4, 0))


def medium_list() -> tuple[LineList, str, str]:
    """1,344 lines in 20 bands that reach v = 7; the reference isotopologue; what they are."""
    if REAL_LIST.exists():
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", DunhamfitWarning)
            lines = read_lines(REAL_LIST, format="hitran", isotopologue={1: "12C16O"})
        used = lines.subset(lines.used & (lines.isotopologue == lines.isotopologues.index("12C16O")))
        return used, "12C16O", "12C16O from HITRAN2016"
    each = -(-1344 // len(_BANDS))
    quantum_numbers = [(upper, lower, j) for upper, lower in _BANDS for j in range(1, each // 2 + 1)]
    upper, lower, j = (np.repeat(column, 2) for column in np.array(quantum_numbers).T)
    step = np.tile([1, -1], len(quantum_numbers))
    step[upper == lower] = 1
    lines = invented_lines(upper, lower, j + step, j, seed=1)
    return lines, "28Si32S", "invented, since the reference folder is missing"


def invented_lines(v_upper, v_lower, j_upper, j_lower, *, seed: int, sigma: float = 1e-4) -> LineList:
    """Noisy lines of an invented molecule (levels of a Kratzer-Fues potential, J. L. Dunham's series of it)."""
    gamma, rotation = 1000.0, 0.3

    def energy(v, j):
        return -rotation * gamma**4 / (v + 0.5 + np.sqrt(gamma**2 + 0.25 + j * (j + 1.0))) ** 2

    count = len(v_upper)
    zero = np.zeros(count, dtype=np.int32)
    noise = np.random.default_rng(seed).normal(0, sigma, count)
    return LineList(
        position=energy(v_upper, j_upper) - energy(v_lower, j_lower) + noise,
        sigma=np.full(count, sigma),
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
        sources=(Source("invented"),),
    )
