"""Coverage of the error bars over simulated campaigns, with the noise and calibration modelled and without.

    python -m benchmarks.coverage [CAMPAIGNS] [SEED] [WORKERS]

Each campaign (13 terms, 6 bands, 3 sources; `tests/reference/thirteen_terms.py`) has noise factors
0.5, 1 and 3, a shared scale error of 5e-8 and a shared offset of 1e-5 cm-1 by source, drawn anew. It
is fitted twice: with the policy "per-source" and calibration terms, and with the uncertainties as
stated and no calibration terms. A 68.3 % interval should hold the truth in 65.5 to 71.1 % of 2,000
campaigns, a 95 % interval in 93.8 to 96.2 % (2.5 binomial standard deviations either way).
"""

from __future__ import annotations

import sys
import time
from concurrent.futures import ProcessPoolExecutor
from multiprocessing import get_context

import numpy as np

from dunhamfit.algebra.criteria import coverage_factor
from dunhamfit.fit.solve import fit_lines
from dunhamfit.inference.degrees import effective_degrees
from dunhamfit.inference.simulate import LEVELS
from tests.reference.thirteen_terms import ISOTOPOLOGUE, NOISE_FACTORS, SOURCES, TERMS, TRUTH, VALUES, campaign

_TASK = 25
_ALLOWED = 2.5


def one(seed: np.random.SeedSequence, calibrated: bool) -> tuple[np.ndarray, np.ndarray]:
    """(Fitted less true constant) / sigma, and the noise factors, of one campaign."""
    lines = campaign(np.random.default_rng(seed), calibrated=calibrated)
    policy = "per-source" if calibrated else "stated"
    fit = fit_lines(lines, TERMS, reference=ISOTOPOLOGUE, policy=policy)
    count = len(VALUES)
    return (fit.values[:count] - VALUES) / fit.sigmas[:count], fit.noise.factors


def several(seeds, calibrated: bool):
    return [one(seed, calibrated) for seed in seeds]


def simulate(campaigns: int, seed: int, workers: int, *, calibrated: bool) -> tuple[np.ndarray, np.ndarray]:
    """z of the constants, shape (campaigns, 13), and noise factors, shape (campaigns, 3 or 0)."""
    seeds = np.random.SeedSequence(seed).spawn(campaigns)
    tasks = [seeds[start : start + _TASK] for start in range(0, campaigns, _TASK)]
    with ProcessPoolExecutor(workers, mp_context=get_context("spawn")) as pool:
        parts = list(pool.map(several, tasks, [calibrated] * len(tasks)))
    z, factors = zip(*(item for part in parts for item in part), strict=True)
    return np.array(z), np.array(factors)


def covered(z: np.ndarray, factors: np.ndarray) -> np.ndarray:
    """Part of the campaigns whose interval holds the truth, shape (levels, 13)."""
    return (np.abs(z) <= factors[:, None, :]).mean(axis=1)


def main(campaigns: int = 2000, seed: int = 1, workers: int = 2) -> None:
    lines = campaign(np.random.default_rng(0))
    degrees = effective_degrees(fit_lines(lines, TERMS, reference=ISOTOPOLOGUE, policy="per-source"))[: len(VALUES)]
    student = np.array([[coverage_factor(level, dof) for dof in degrees] for level in LEVELS])
    normal = np.array([[coverage_factor(level)] * len(VALUES) for level in LEVELS])
    start = time.perf_counter()
    z, factors = simulate(campaigns, seed, workers, calibrated=True)
    plain, _ = simulate(campaigns, seed, workers, calibrated=False)
    took = time.perf_counter() - start
    good, bad = covered(z, student), covered(plain, normal)
    sigma = np.sqrt(np.array(LEVELS) * (1 - np.array(LEVELS)) / campaigns)
    low, high = np.array(LEVELS) - _ALLOWED * sigma, np.array(LEVELS) + _ALLOWED * sigma
    print(f"{campaigns} campaigns of {len(lines)} lines, seed {seed}; 2 fits each, {took:.0f} s")
    print(f"allowed: {low[0]:.3f} to {high[0]:.3f} and {low[1]:.3f} to {high[1]:.3f}")
    print("            noise and calibration modelled        stated, no calibration")
    print("constant    68.3 %    95 %    rms z                68.3 %    95 %    rms z")
    for j, (k, l) in enumerate(TRUTH):
        narrow, wide = ("" if low[i] <= good[i, j] <= high[i] else "*" for i in range(2))
        rms, plain_rms = (float(np.sqrt(np.mean(each[:, j] ** 2))) for each in (z, plain))
        print(
            f"Y{k}{l}       {good[0, j]:8.4f}{narrow:1}{good[1, j]:8.4f}{wide:1}{rms:8.3f}"
            f"         {bad[0, j]:10.4f}{bad[1, j]:8.4f}{plain_rms:10.2f}"
        )
    outside = int(np.sum((good < low[:, None]) | (good > high[:, None])))
    print(f"outside of the allowed range: {outside} of {good.size}")
    for name, true, found in zip(SOURCES, NOISE_FACTORS, factors.T, strict=True):
        print(f"noise factor of {name}: true {true}, found {found.mean():.4f}, spread {found.std():.4f}")


if __name__ == "__main__":
    main(*map(int, sys.argv[1:]))
