"""Speed and calibration of the sampled posterior.

    python -m benchmarks.posterior speed [HITRAN FILE]
    python -m benchmarks.posterior commands [HITRAN FILE]
    python -m benchmarks.posterior calibration [CAMPAIGNS] [WORKERS]

speed        Effective samples a second of the worst constant and of the worst number: 12C16O from a HITRAN list,
             terms [7, 5, 4, 3, 1], one noise factor a band; against emcee as its manual sets it up, with the
             stretch move on all numbers at once, one call a walker, in coordinates whitened by hand, and the same
             with all walkers evaluated in one batch. Warm-up is counted on no side; autocorrelation times are
             emcee's own estimate.
commands     Time of a whole process that reads an archive, samples to the default length and stores the
             result, over that of one that reads the list, fits and stores. Medians of five.
calibration  Simulation-based calibration (`tests/inference/simulated_campaign.py`) under each error model.

Run `speed` with OPENBLAS_NUM_THREADS=1 on a machine that has other work to do: BLAS threads that wait for a core
cost both sides more than they give.
"""

from __future__ import annotations

import subprocess
import sys
import tempfile
import time
import warnings
from concurrent.futures import ProcessPoolExecutor
from multiprocessing import get_context
from pathlib import Path

import emcee
import numpy as np
from emcee.autocorr import integrated_time
from scipy.special import chdtrc

from dunhamfit.fit.record import Fit
from dunhamfit.fit.solve import fit_lines
from dunhamfit.inference.chain import run_chain, start_chain
from dunhamfit.inference.frame import Frame, make_frame
from dunhamfit.inference.marginal import MarginalTarget
from dunhamfit.inference.sampling import ERROR_MODELS, FACTOR_RANGE
from dunhamfit.lines.reading import read_lines
from dunhamfit.molecule.terms import TermSet
from tests.inference.simulated_campaign import ranks, uniformity

LIST = Path(__file__).resolve().parents[2] / "shared" / "reference" / "co_hitran2016_6iso.par"
ORDERS = [7, 5, 4, 3, 1]
STEPS, PLAIN_STEPS, PLAIN_WARM_UP, SINGLE_STEPS = 4000, 16_000, 4000, 300
WALKERS = (16, 32, 64)
PROCESSES = 5
TASK, BINS = 25, 16

FIT = """
from dunhamfit.archive.store import open_archive
from dunhamfit.fit.solve import fit_lines
from dunhamfit.lines.reading import read_lines
from dunhamfit.molecule.terms import TermSet
lines = read_lines({list!r}, format="hitran", isotopologue={{1: "12C16O"}})
fit = fit_lines(lines, TermSet.from_orders({orders}), reference="12C16O", policy="per-band")
with open_archive({archive!r}, mode="a") as archive:
    archive.save(fit)
"""
SAMPLE = """
from dunhamfit.archive.store import open_archive
from dunhamfit.inference.sampling import sample
from dunhamfit.inference.storing import ARRAY_UNITS, pack
with open_archive({archive!r}, mode="a") as archive:
    posterior = sample(archive.latest(), seed=1)
    posterior.summary()
    archive.save_posterior(archive.latest_number(), pack(posterior), units=ARRAY_UNITS)
"""


def co_fit(path: Path) -> Fit:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # other isotopologues are left out on purpose
        lines = read_lines(path, format="hitran", isotopologue={1: "12C16O"})
    return fit_lines(lines, TermSet.from_orders(ORDERS), reference="12C16O", policy="per-band")


def rate(draws: np.ndarray, seconds: float, constants: int) -> tuple[float, float, float]:
    """Effective samples a second of the worst constant and the worst number, and the longest autocorrelation time.

    `draws` has the shape (steps, walkers, numbers), constants first.
    """
    tau = np.maximum(integrated_time(draws, tol=0), 1.0)
    total = np.prod(draws.shape[:2])
    return total / tau[:constants].max() / seconds, total / tau.max() / seconds, tau.max()


def own_rate(fit: Fit, walkers: int):
    frame = make_frame(fit)
    target = MarginalTarget(fit.triangles, frame, FACTOR_RANGE)
    target.walkers = walkers
    state = start_chain(target, seed=1, ensembles=1)
    began = time.perf_counter()
    block = run_chain(target, state, steps=STEPS)
    seconds = time.perf_counter() - began
    return rate(block.draws[:, 0], seconds, frame.size)


def plain_rates(fit: Fit):
    """Rates with all walkers in one batch, and with one call a walker; the chain is the same."""
    frame = make_frame(fit)
    target = _everything(fit, frame)
    walkers, size = 2 * (frame.size + frame.factors) + 8, frame.size + frame.factors
    spread = np.concatenate([np.ones(frame.size), frame.noise_sigmas / frame.noise_factors])
    centre = np.concatenate([np.zeros(frame.size), np.log(frame.noise_factors)])
    sampler = emcee.EnsembleSampler(walkers, size, target, vectorize=True)
    start = centre + spread * np.random.default_rng(1).standard_normal((walkers, size))
    state = sampler.run_mcmc(start, PLAIN_WARM_UP, store=False)
    seconds = _seconds(sampler, state, PLAIN_STEPS)
    batch = rate(sampler.get_chain(), seconds, frame.size)
    singly = emcee.EnsembleSampler(walkers, size, lambda coords: target(coords[None])[0])
    slower = _seconds(singly, state, SINGLE_STEPS) / SINGLE_STEPS * PLAIN_STEPS
    return batch, (batch[0] * seconds / slower, batch[1] * seconds / slower, batch[2])


def _seconds(sampler: emcee.EnsembleSampler, state: emcee.State, steps: int) -> float:
    began = time.perf_counter()
    sampler.run_mcmc(state, steps)
    return time.perf_counter() - began


def _everything(fit: Fit, frame: Frame):
    """Log posterior of all constants and noise factors from the residuals of all lines."""
    design = fit.design
    sigma = fit.lines.sigma[design.used]
    rows = ((design.rows.whitened / design.rows.scale[:, None]) @ frame.factor)[design.row_of] / sigma[:, None]
    right = fit.residuals[design.used] / sigma
    label = frame.label[design.group_of]
    lines = np.bincount(label, minlength=frame.factors)

    def log_prob(coords: np.ndarray) -> np.ndarray:
        log_factors = coords[:, frame.size :]
        t = (right - coords[:, : frame.size] @ rows.T) * np.exp(-log_factors)[:, label]
        return -0.5 * np.einsum("wn,wn->w", t, t) - log_factors @ lines

    return log_prob


def speed(path: Path) -> None:
    fit = co_fit(path)
    print(f"{fit.statistics.lines} lines, {len(fit.values)} constants, {len(fit.noise.factors)} noise factors")
    batch, singly = plain_rates(fit)
    for words, plain in (("one call a walker", singly), ("in one batch", batch)):
        print(
            f"plain emcee, {words}: {plain[0]:.0f} effective samples a second of the worst constant, "
            f"{plain[1]:.0f} of the worst number, tau {plain[2]:.0f} steps"
        )
    for walkers in WALKERS:
        own = own_rate(fit, walkers)
        print(
            f"dunhamfit, {walkers} walkers: {own[0]:.0f} of the worst constant ({own[0] / singly[0]:.0f} and "
            f"{own[0] / batch[0]:.0f} times plain), {own[1]:.0f} of the worst number, tau {own[2]:.1f} steps"
        )


def commands(path: Path) -> None:
    with tempfile.TemporaryDirectory() as folder:
        archive = str(Path(folder) / "co.h5")
        seconds = {
            name: [_process(text.format(list=str(path), orders=ORDERS, archive=archive)) for _ in range(PROCESSES)]
            for name, text in (("fit", FIT), ("sample", SAMPLE))
        }
    first, second = (float(np.median(times)) for times in seconds.values())
    print(f"fit {first:.2f} s, sample {second:.2f} s: {second / first:.2f} times")


def _process(code: str) -> float:
    began = time.perf_counter()
    subprocess.run([sys.executable, "-W", "ignore", "-c", code], check=True)
    return time.perf_counter() - began


def _task(model: str, campaigns: int, seed: int) -> tuple[dict[str, np.ndarray], int]:
    return ranks(model, campaigns=campaigns, seed=seed)


def calibration(campaigns: int, workers: int) -> None:
    tasks = -(-campaigns // TASK)
    for model in ERROR_MODELS:
        with ProcessPoolExecutor(workers, mp_context=get_context("spawn")) as pool:
            parts = list(pool.map(_task, [model] * tasks, [TASK] * tasks, range(tasks)))
        draws = parts[0][1]
        print(f"{model}: {tasks * TASK} campaigns, ranks among {draws} draws in {BINS} bins")
        for name in parts[0][0]:
            rank = np.concatenate([found[name] for found, _ in parts])
            square, _ = uniformity(rank, draws, bins=BINS)
            print(f"  {name:14s} chi-square {square:5.1f} on {BINS - 1}, p = {chdtrc(BINS - 1, square):.3f}")


def main(arguments: list[str]) -> int:
    what, rest = (arguments[0], arguments[1:]) if arguments else ("", [])
    if what in ("speed", "commands"):
        {"speed": speed, "commands": commands}[what](Path(rest[0]) if rest else LIST)
    elif what == "calibration":
        calibration(int(rest[0]) if rest else 500, int(rest[1]) if len(rest) > 1 else 1)
    else:
        print(__doc__)
        return 2
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
