"""Campaigns drawn from the prior, and ranks of the truth among the draws of the posterior.

Simulation-based calibration: if the truth is drawn from the prior and the lines from the truth,
the rank of the truth among independent draws of a correct posterior is uniform (S. Talts et al.,
arXiv:1804.06788). The prior of the Dunham coefficients is uniform without bounds and the model is
linear in them, so that their rank does not depend on where the truth lies: it is held.

The molecule is invented; E(v, J) as in J. L. Dunham, Phys. Rev. 41, 721 (1932).
"""

from __future__ import annotations

import numpy as np

from dunhamfit.fit.record import Fit
from dunhamfit.fit.solve import fit_lines
from dunhamfit.inference.posterior import Posterior
from dunhamfit.inference.sampling import sample
from dunhamfit.lines.line_list import LineList, Source
from dunhamfit.molecule.terms import TermSet

TRUTH = {"Y10": 701.25, "Y20": -2.75, "Y01": 0.3125, "Y11": -0.0015}
TERMS = TermSet.from_orders([2, 1])
SIGMA = 1e-4
OFFSET_SIGMA = 2e-4
SOURCES = (Source("oven", offset=OFFSET_SIGMA), Source("jet"))
# Narrow enough that truths drawn from it need no more lines than a quick test can afford.
FACTOR_RANGE = (0.4, 2.5)


def energy(v, j):
    """Term value in cm-1."""
    x, y = v + 0.5, j * (j + 1.0)
    return TRUTH["Y10"] * x + TRUTH["Y20"] * x**2 + TRUTH["Y01"] * y + TRUTH["Y11"] * x * y


def noiseless(j_max: int = 12) -> LineList:
    """Two bands seen by `oven`, one of them by `jet` too; R and P lines up to J'' = `j_max`."""
    j = np.arange(1, j_max + 1)
    rows = []
    for source, upper, lower in ((0, 1, 0), (0, 2, 1), (1, 1, 0)):
        for branch in (1, -1):
            rows.append((np.full_like(j, source), np.full_like(j, upper), np.full_like(j, lower), j + branch, j))
    source, v_upper, v_lower, j_upper, j_lower = (np.concatenate(column) for column in zip(*rows, strict=True))
    count = len(source)
    zero = np.zeros(count, dtype=int)
    return LineList(
        position=energy(v_upper, j_upper) - energy(v_lower, j_lower),
        sigma=np.full(count, SIGMA),
        v_upper=v_upper,
        j_upper=j_upper,
        v_lower=v_lower,
        j_lower=j_lower,
        isotopologue=zero,
        source=source,
        file=zero,
        row=np.arange(1, count + 1),
        exclusion=zero,
        isotopologues=("28Si32S",),
        sources=SOURCES,
    )


def shifted(lines: LineList, by: np.ndarray) -> LineList:
    """The same lines with `by` (cm-1) added to their positions."""
    columns = {name: getattr(lines, name) for name in lines.__dataclass_fields__}
    return LineList(**(columns | {"position": lines.position + by}))


def fitted(lines: LineList, *, policy: str = "per-source") -> Fit:
    return fit_lines(lines, TERMS, reference="28Si32S", policy=policy)


def campaign(rng: np.random.Generator, model: str) -> tuple[LineList, dict[str, float]]:
    """Lines with everything but the constants drawn from the prior of `model`, and the truth by name."""
    lines = noiseless()
    factors = np.exp(rng.uniform(*np.log(FACTOR_RANGE), size=2))
    offset = OFFSET_SIGMA * rng.standard_normal()
    reduced, own = ERRORS[model](rng, len(lines))
    noise = factors[lines.source] * SIGMA * reduced + offset * (lines.source == 0)
    truth = TRUTH | {"offset[oven]": offset, "factor[oven]": factors[0], "factor[jet]": factors[1]} | own
    return shifted(lines, noise), truth


def _gaussian(rng, count):
    return rng.standard_normal(count), {}


def _student(rng, count):
    wing = 0.0
    while wing < 1.0:
        wing = rng.gamma(2.0, 10.0)
    return rng.standard_t(wing, count), {"wing": wing}


def _outliers(rng, count):
    fraction, width = rng.beta(1.0, 19.0), np.exp(rng.uniform(*np.log([3.0, 1000.0])))
    bad = rng.random(count) < fraction
    return np.where(bad, width, 1.0) * rng.standard_normal(count), {"bad_fraction": fraction, "bad_width": width}


# Reduced residuals of so many lines and the own parameters of the error model, drawn from their priors.
ERRORS = {"gaussian": _gaussian, "student": _student, "outliers": _outliers}


def rank_of_truth(posterior: Posterior, truth: dict[str, float]) -> dict[str, int]:
    """Number of draws below the truth, for every quantity; one draw a walker, which are independent."""
    last = posterior.chain[-1].reshape(-1, len(posterior.names))
    return {name: int(np.sum(last[:, place] < truth[name])) for place, name in enumerate(posterior.names)}


def ranks(model: str, *, campaigns: int, seed: int) -> tuple[dict[str, np.ndarray], int]:
    """Ranks of the truth in so many campaigns, and the number of draws that they count."""
    rng = np.random.default_rng(seed)
    found = []
    for _ in range(campaigns):
        lines, truth = campaign(rng, model)
        posterior = sample(
            fitted(lines), seed=int(rng.integers(2**32)), total=1, model=model, factor_range=FACTOR_RANGE
        )
        found.append(rank_of_truth(posterior, truth))
    draws = int(np.prod(posterior.chain.shape[1:3]))
    return {name: np.array([item[name] for item in found]) for name in found[0]}, draws


def uniformity(rank: np.ndarray, draws: int, *, bins: int) -> tuple[float, np.ndarray]:
    """Chi-square of the ranks 0 .. draws against a uniform law, and the counts in bins of equal width or nearly."""
    edges = np.linspace(0, draws + 1, bins + 1).round().astype(int)
    counts = np.histogram(rank, bins=edges - 0.5)[0]
    expected = len(rank) * np.diff(edges) / (draws + 1)
    return float(np.sum((counts - expected) ** 2 / expected)), counts
