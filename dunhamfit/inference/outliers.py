"""The search for lines that do not belong, by fits without them.

Each line is judged against a fit of the others: its residual, over what it and the fit should
scatter by, follows Student's distribution if the line is as good as the others. It is large
where that has a probability below `level` divided by the number of lines, so that lines without an error
show any with a probability of `level` at the most (Bonferroni).

Wrong lines pull the fit and swell the noise factors, and so hide each other. Where more than a few are
large, or a factor is swollen, candidates come from a robust fit, which they hardly pull. Then the
fit is repeated without the large lines and every line is judged again, those left out by their prediction,
until the list stands still: a good line that was a candidate comes back, a wrong one that others had
hidden is found. (Repeated deletion with judgement of all lines: A. S. Hadi and J. S. Simonoff, J. Am.
Stat. Assoc. 88, 1264 (1993), from memory.)
"""

from __future__ import annotations

from collections.abc import Callable
from contextlib import suppress
from dataclasses import dataclass, replace

import numpy as np
from scipy.special import ndtri

from dunhamfit.errors import CannotDetermine, NotConverged
from dunhamfit.fit.record import Fit
from dunhamfit.fit.solve import fit_model
from dunhamfit.inference.studentised import Studentised, noise_of_lines, studentise
from dunhamfit.lines.line_list import LineList

# What the plain fit must show before more is done: a probability so many times above that of a large line; or a pull
# on a prior, in sigma.
_SUSPICIOUS, _PULLED_PRIOR = 5.0, 5.0
# A noise factor of this size may come from a line that pulls all others.
_INCREDIBLE = 5.0
# Median of |u| for normal u; what part of it, over how many lines, means that a few large ones make the factor.
_NORMAL_MEDIAN, _SWOLLEN, _FEWEST = 0.6745, 0.6, 10
# Candidates may be many, the judgement afterwards sends good ones back; the loss of the robust fit they come from.
_CANDIDATES, _LOSS = 0.85, "watson"
# Part of the lines up to which those that are large in the fit as it is can be left out at once.
_FEW = 0.01
# Fits without large lines before the search is given up, from few and from candidates.
_FEW_ROUNDS, _ROUNDS = 3, 4
# More lines than this part of all are no wrong lines: then the stated uncertainties or the model are wrong.
_TOO_MANY = 0.1
# Part of its position by which a line in a wrong unit is off, and hardly another one.
_ABSURD = 0.3

REASON = "listed in the ledger"


@dataclass(frozen=True, eq=False)
class Search:
    """Where the search ended.

    Attributes
    ----------
    listed : ndarray of bool, shape (n_lines,)
        Used lines that are large.
    judged : Studentised
        How every line was judged.
    without : Fit or None
        The plain fit without the listed lines that judged them; None for the fit as it is.
    settled : bool
        Whether the list stands still; if not, the fit as it is has judged.
    remark : str
        Why the listed lines were not left out.
    """

    listed: np.ndarray
    judged: Studentised
    without: Fit | None = None
    settled: bool = True
    remark: str = ""


def limit(fit: Fit, level: float) -> float:
    """Smallest |t| that is large, for a line whose uncertainty is known."""
    return float(-ndtri(level / (2 * max(int(fit.lines.used.sum()), 1))))


def search(
    fit: Fit, judged: Studentised, others: np.ndarray, *, level: float, refit: Callable[[LineList], Fit]
) -> Search:
    """Find the large lines of a fit.

    Parameters
    ----------
    fit : Fit
    judged : Studentised
        The lines of `fit` as it is.
    others : ndarray of bool, shape (n_lines,)
        Lines not used that are to be judged as well.
    level : float
        Chance of any large line among lines without an error.
    refit : callable
        Makes the same kind of fit of other lines, but without a robust loss.
    """
    listed = _large(fit, judged, level)
    if not _suspicious(fit, judged, level):
        return Search(listed, judged)
    few = fit.robust == "none" and listed.any() and listed.sum() <= _FEW * fit.lines.used.sum()
    if few and not _swollen(fit, judged):
        with suppress(CannotDetermine, NotConverged):
            found = _stand_still(fit, listed, others, level, refit, _FEW_ROUNDS)
            if found is not None and not _swollen(found.without, found.judged):
                return found
    try:
        listed = _candidates(fit, level)
        found = _stand_still(fit, listed, others, level, refit, _ROUNDS)
    except (CannotDetermine, NotConverged) as error:
        remark = f"the lines listed cannot be left out, so that a fit that they pull has judged them: {error}"
        return Search(listed, judged, remark=remark)
    return found or Search(_large(fit, judged, level), judged, settled=False)


def _suspicious(fit: Fit, judged: Studentised, level: float) -> bool:
    """Whether anything hints at a wrong line: wrong lines can hide each other, but not without a trace."""
    used = fit.lines.used
    if fit.robust != "none":
        return bool(np.any(np.abs(judged.residual[used]) > _CANDIDATES * limit(fit, level) * judged.sigma[used]))
    if np.nanmin(judged.p[used], initial=1.0) * used.sum() < _SUSPICIOUS * level or _swollen(fit, judged):
        return True
    for value, item in zip(fit.values, fit.model.parameters, strict=True):
        prior = fit.model.prior(item)
        if prior is not None and abs(value - prior.value) > _PULLED_PRIOR * prior.sigma:
            return True
    return False


def _swollen(fit: Fit, judged: Studentised) -> bool:
    """Whether a noise factor is beyond belief, or much larger than the middle of its residuals says."""
    if np.any(fit.noise.factors > _INCREDIBLE):
        return True
    used = fit.design.used
    size = np.abs(judged.residual[used]) / judged.sigma[used]
    label = fit.noise.label[fit.design.group_of]
    for k in np.flatnonzero(fit.noise.determined):
        own = size[label == k]
        if len(own) >= _FEWEST and np.median(own) < _SWOLLEN * _NORMAL_MEDIAN:
            return True
    return False


def _candidates(fit: Fit, level: float) -> np.ndarray:
    """Lines that are large in a robust fit, shape (n_lines,)."""
    robust, lines = fit, fit.lines
    absurd = np.zeros(len(lines), dtype=bool)
    if fit.robust == "none":
        if fit.model.calibration:
            # A position in a wrong unit has all the leverage on a scale: find such lines without calibration terms.
            bare = fit_model(replace(fit.model, calibration=()), lines, policy=fit.noise.policy, robust=_LOSS)
            absurd = lines.used & (np.abs(bare.residuals) > _ABSURD * np.abs(lines.position - bare.residuals))
        robust = fit_model(fit.model, lines.excluded(absurd, REASON), policy=fit.noise.policy, robust=_LOSS)
    sigma = lines.sigma * noise_of_lines(robust)[0]
    return absurd | (lines.used & (np.abs(robust.residuals) > _CANDIDATES * limit(fit, level) * sigma))


def _stand_still(
    fit: Fit, listed: np.ndarray, others: np.ndarray, level: float, refit: Callable[[LineList], Fit], rounds: int
) -> Search | None:
    """Leave out what is large until that does not change; None where too many are, or it does not settle."""
    for _ in range(rounds):
        if listed.sum() > max(_TOO_MANY * fit.lines.used.sum(), 3):
            return None
        without = refit(fit.lines.excluded(listed, REASON))
        judged = studentise(without, others | listed)
        before, listed = listed, _large(fit, judged, level)
        if np.array_equal(before, listed):
            return Search(listed, judged, without)
    return None


def _large(fit: Fit, judged: Studentised, level: float) -> np.ndarray:
    used = fit.lines.used
    return used & (np.nan_to_num(judged.p, nan=1.0) < level / used.sum())
