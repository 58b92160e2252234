"""An invented campaign whose truth is known: 13 terms, 6 bands, 3 sources that err in different ways.

Nothing here was measured. The constants are round numbers of a plausible size for a heavy diatomic
molecule; the lines are computed from the formula of J. L. Dunham, Phys. Rev. 41, 721 (1932), without
the code under test. Every source states the same uncertainty, which is right for one of them, twice
too large for another and three times too small for the third; the lines of a source share one error of
its frequency scale and one offset, both drawn anew for every campaign.
"""

from __future__ import annotations

import numpy as np

from dunhamfit.lines.line_list import LineList, Source
from dunhamfit.molecule.terms import TermSet

ISOTOPOLOGUE = "28Si32S"
# (k, l): Y_kl in cm-1, in the order of the terms of a fit.
TRUTH = {
    (1, 0): 760.0, (2, 0): -2.7, (3, 0): 4.0e-3, (4, 0): -3.0e-5,
    (0, 1): 0.31, (1, 1): -1.5e-3, (2, 1): -1.2e-6, (3, 1): 8.0e-9,
    (0, 2): -2.1e-7, (1, 2): -4.0e-10, (2, 2): -3.0e-12,
    (0, 3): -2.0e-14, (1, 3): -1.0e-15,
}  # fmt: skip
TERMS = TermSet.from_orders([4, 3, 2, 1])
VALUES = np.array(list(TRUTH.values()))

SIGMA = 1e-4  # cm-1, stated for every line
SOURCES = ("cell", "oven", "jet")
NOISE_FACTORS = (0.5, 1.0, 3.0)
SCALE_SIGMA, OFFSET_SIGMA = 5e-8, 1e-5  # of the shared errors; cm-1 for the offset
# (source, v', v'')
BANDS = ((0, 1, 0), (0, 2, 1), (1, 2, 0), (1, 3, 1), (2, 3, 2), (2, 4, 3))
J_MAX = 60


def energy(v, j):
    """Term value in cm-1."""
    x, y = v + 0.5, j * (j + 1.0)
    return sum(value * x**k * y**l for (k, l), value in TRUTH.items())


def campaign(
    rng: np.random.Generator,
    *,
    calibrated: bool = True,
    shared: float = 1.0,
    factors: tuple[float, ...] = NOISE_FACTORS,
    bands=BANDS,
    j_max: int = J_MAX,
) -> LineList:
    """One simulated campaign: R(0) to R(j_max) and P(1) to P(j_max) of every band.

    Parameters
    ----------
    calibrated : bool
        Whether the sources state the sizes of their shared errors. The errors are there in any case.
    shared : float
        What the shared errors are multiplied by; 0 for none.
    factors : tuple of float
        True noise factor of each source.
    bands : sequence of (source, v', v'')
    j_max : int
    """
    r, p = np.arange(j_max + 1), np.arange(1, j_max + 1)
    j_lower = np.concatenate([r, p])
    j_upper = np.concatenate([r + 1, p - 1])
    source, upper, lower = (np.repeat(column, len(j_lower)) for column in np.array(bands).T)
    j_lower, j_upper = np.tile(j_lower, len(bands)), np.tile(j_upper, len(bands))
    true = energy(upper, j_upper) - energy(lower, j_lower)
    scale, offset = shared * rng.normal(0, [[SCALE_SIGMA], [OFFSET_SIGMA]], (2, len(SOURCES)))
    noise = np.array(factors)[source] * SIGMA * rng.standard_normal(len(true))
    zero = np.zeros(len(true), dtype=int)
    errors = {"offset": OFFSET_SIGMA, "scale": SCALE_SIGMA} if calibrated else {}
    return LineList(
        position=true * (1 + scale[source]) + offset[source] + noise,
        sigma=np.full(len(true), SIGMA),
        v_upper=upper,
        j_upper=j_upper,
        v_lower=lower,
        j_lower=j_lower,
        isotopologue=zero,
        source=source,
        file=zero,
        row=np.arange(1, len(true) + 1),
        exclusion=zero,
        isotopologues=(ISOTOPOLOGUE,),
        sources=tuple(Source(name, **errors) for name in SOURCES),
    )
