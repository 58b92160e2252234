"""Cost of noise factors, calibration terms and resampling, as multiples of the plain fit of the same lines.

    python -m benchmarks.resampling [REPEATS]

Invented lines of the size of a large compilation: 5,381 lines in 60 bands of 6 isotopologues from 3
sources, 36 constants. All figures are best times of one run on one machine, so that their ratios mean
something where times do not. On a busy machine set OPENBLAS_NUM_THREADS=1: the threads of the linear
algebra wait for each other there, for both sides of each ratio.
"""

from __future__ import annotations

import sys
import time
from dataclasses import replace

import numpy as np

from dunhamfit.fit.solve import fit_lines
from dunhamfit.inference.influence import influence
from dunhamfit.inference.resample import bootstrap, leave_one_out
from dunhamfit.inference.systematics import find_systematics
from dunhamfit.lines.line_list import LineList, Source
from dunhamfit.molecule.isotopologue import Isotopologue, mass_ratio
from dunhamfit.molecule.masses import Masses
from dunhamfit.molecule.terms import TermSet
from dunhamfit.show.rounding import rounded_constants

ISOTOPOLOGUES = ("28Si32S", "29Si32S", "30Si32S", "28Si34S", "29Si34S", "30Si34S")
BANDS = ((1, 0), (2, 0), (3, 0), (4, 0), (2, 1), (3, 2), (4, 3), (5, 4), (6, 5), (7, 6))
LINES = 5381
TERMS = TermSet.from_orders([7, 5, 4, 3, 1])
BREAKDOWN = {atom: ["10", "20", "30", "01", "11", "02"] for atom in ("Si", "S")}
SIGMA = 1e-4


def invented_lines(rng: np.random.Generator, *, calibrated: bool) -> LineList:
    """Noisy lines of a simple formula, in bands of the same length."""
    v_upper, v_lower = np.array(BANDS).T
    code, band = (column.ravel() for column in np.meshgrid(range(len(ISOTOPOLOGUES)), range(len(BANDS)), indexing="ij"))
    each = -(-LINES // len(code))
    m = np.arange(each) - each // 2
    m = np.tile(np.where(m >= 0, m + 1, m), len(code))[:LINES]
    code, band = (np.repeat(column, each)[:LINES] for column in (code, band))
    j_lower = np.where(m > 0, m - 1, -m)
    j_upper = np.where(m > 0, m, -m - 1)
    upper, lower = v_upper[band], v_lower[band]
    masses = Masses.ame2020()
    reference, *_ = parsed = [Isotopologue.parse(name, masses) for name in ISOTOPOLOGUES]
    # With the true mass ratios the model fits, as it does a real list; the search for noise factors depends on it.
    rho = np.array([float(mass_ratio(reference, other)) for other in parsed])[code]

    def energy(v, j):
        x, y = v + 0.5, j * (j + 1.0)
        return (
            rho * 760 * x - rho**2 * 2.7 * x**2 + rho**2 * 0.31 * y - rho**3 * 1.5e-3 * x * y - rho**4 * 2.1e-7 * y**2
        )

    zero = np.zeros(LINES, dtype=int)
    errors = {"offset": 1e-5, "scale": 5e-8} if calibrated else {}
    return LineList(
        position=energy(upper, j_upper) - energy(lower, j_lower) + SIGMA * rng.standard_normal(LINES),
        sigma=np.full(LINES, SIGMA),
        v_upper=upper,
        j_upper=j_upper,
        v_lower=lower,
        j_lower=j_lower,
        isotopologue=code,
        source=band % 3,
        file=zero,
        row=np.arange(1, LINES + 1),
        exclusion=zero,
        isotopologues=ISOTOPOLOGUES,
        sources=tuple(Source(name, **errors) for name in ("cell", "oven", "jet")),
    )


def fitted(lines: LineList, policy: str):
    return fit_lines(lines, TERMS, reference=ISOTOPOLOGUES[0], breakdown=BREAKDOWN, policy=policy)


def best(actions, repeats: int) -> list[float]:
    """Best time of each action; they take turns, so that a busy machine is unfair to none of them."""
    times = [[] for _ in actions]
    for _ in range(repeats):
        for action, taken in zip(actions, times, strict=True):
            start = time.perf_counter()
            action()
            taken.append(time.perf_counter() - start)
    return [min(taken) for taken in times]


def main(repeats: int = 10) -> None:
    plain_lines = invented_lines(np.random.default_rng(1), calibrated=False)
    lines = invented_lines(np.random.default_rng(1), calibrated=True)
    fit = fitted(plain_lines, "stated")
    print(f"{LINES} lines, {len(fit.groups)} bands, {len(fit.constants)} constants")
    print(f"condition {fit.statistics.condition:.2g}; each beside the plain fit, in turns")

    def fresh():
        # Nothing that an earlier call has kept.
        return replace(fit)

    for name, action in (
        ("noise factors by source, 6 calibration terms", lambda: fitted(lines, "per-source")),
        ("noise factors by band, 6 calibration terms", lambda: fitted(lines, "per-band")),
        ("leave one band out, all bands", lambda: leave_one_out(fresh(), "band")),
        ("leave one source out, all sources", lambda: leave_one_out(fresh(), "source")),
        ("influence of sources", lambda: influence(fresh())),
        ("systematic residuals", lambda: find_systematics(fresh())),
        ("rounding guard", lambda: rounded_constants(fresh())),
        ("bootstrap by line, 20 resamples", lambda: bootstrap(fresh(), resamples=20, seed=1)),
        ("bootstrap by band, 20 resamples", lambda: bootstrap(fresh(), by="band", resamples=20, seed=1)),
    ):
        plain, took = best([lambda: fitted(plain_lines, "stated"), action], repeats)
        print(f"{name:48} {1e3 * took:8.1f} ms, plain {1e3 * plain:6.1f} ms {took / plain:7.2f} x")


if __name__ == "__main__":
    main(*map(int, sys.argv[1:]))
