"""Which terms: a wide fit, every smaller set along its staircase, and the set that the lines speak for.

Noise factors are those of the wide fit throughout, so that all sets are judged by the same
weights. The answer is a list of candidates, one of them recommended and the reason said, and the
sets that the lines hardly tell from it, whose spread is part of a prediction's uncertainty.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from dunhamfit.fit.model import Prior
from dunhamfit.fit.record import Fit
from dunhamfit.fit.solve import make_model
from dunhamfit.inference.candidates import Board, Candidate
from dunhamfit.inference.widest import GENEROUS, widest_fit
from dunhamfit.lines.line_list import LineList
from dunhamfit.molecule.masses import Masses
from dunhamfit.molecule.terms import Term, TermSet

# A top term with |value| below this many sigma is not worth a parameter.
LEAST_T = 2.0
# Sets within this BIC of the best are near-equal: beyond it the evidence is "very strong"
# (R. E. Kass and A. E. Raftery, J. Am. Stat. Assoc. 90, 773 (1995)).
NEAR_BIC = 10.0
# Up to here the evidence against a smaller set is "positive" at most (same paper): it is then preferred.
PLAIN_BIC = 6.0
# Random weightings of the bands: shares are good to about a hundredth.
_DRAWS = 1000


@dataclass(frozen=True, eq=False)
class Selection:
    """Candidate sets of terms, and which one is recommended.

    Attributes
    ----------
    wide : Fit
        The fit with every term that was considered.
    candidates : tuple of Candidate
        By ascending number of parameters.
    recommended : Candidate
    near_equal : tuple of Candidate
        Sets that the lines hardly tell from the recommended one, itself included.
    weights : ndarray of float, shape (near_equal,)
        Share of each near-equal set, from how it predicts left-out bands.
    bands : tuple of str
        Bands that were left out one at a time.
    reason : str
    """

    wide: Fit
    candidates: tuple[Candidate, ...]
    recommended: Candidate
    near_equal: tuple[Candidate, ...]
    weights: np.ndarray
    bands: tuple[str, ...]
    reason: str

    def model_spread(self, rows: np.ndarray, departure: np.ndarray | float = 0.0) -> np.ndarray:
        """How far the predictions of the near-equal sets lie from another one, root of the weighted mean square, cm-1.

        About the prediction that is quoted, not about their own mean, so that a fit which lacks a term that all
        near-equal sets have is told by how much it is off.

        Parameters
        ----------
        rows : ndarray of float, shape (lines, p)
            Derivatives with respect to the parameters of the wide fit.
        departure : ndarray of float, shape (lines,)
            The quoted prediction less that of the wide fit, cm-1.

        Returns
        -------
        ndarray of float, shape (lines,)
        """
        changes = np.tile(np.where(self.wide.model.fixed, self.wide.values, 0.0), (len(self.near_equal), 1))
        for change, candidate in zip(changes, self.near_equal, strict=True):
            change[candidate.columns] = candidate.values
        changes -= self.wide.values
        return np.sqrt(self.weights @ (changes @ rows.T - departure) ** 2)


def select_terms(
    lines: LineList,
    *,
    reference: str,
    breakdown: Mapping[str, Sequence[str]] | None = None,
    priors: Mapping[str, Prior] | None = None,
    policy: str = "stated",
    masses: Masses | None = None,
    widest: Sequence[int] = GENEROUS,
    progress: Callable[[int, int], None] | None = None,
) -> Selection:
    """Compare the sets of terms that the lines can determine; parameters as for `dunhamfit.fit.solve.fit_lines`.

    Parameters
    ----------
    widest : sequence of int
        Highest k for l = 0, 1, 2, ... to be considered.
    progress : callable, optional
        Told the number of sets judged and, since nobody knows how many will be, the same number again.

    Raises
    ------
    CannotDetermine
        If no set of terms, or no breakdown or calibration term that is asked for, can be told from the lines.
    """
    own = [name for name in priors or {} if name.startswith("Y")]
    attached = [f"Y{name.removeprefix('Y')}" for names in (breakdown or {}).values() for name in names]
    terms = TermSet.from_names(["Y10", "Y01", *own, *attached])
    model = make_model(lines, terms, reference=reference, breakdown=breakdown, priors=priors, masses=masses)
    return compare_sets(widest_fit(model, lines, policy=policy, orders=tuple(widest)), progress=progress)


def compare_sets(wide: Fit, *, progress: Callable[[int, int], None] | None = None) -> Selection:
    """Compare the sets of terms inside a wide fit, one term at a time along the staircase.

    Forward from the smallest set, backward from the widest; every set that a step looked at is a
    candidate.

    Parameters
    ----------
    wide : Fit
        With the widest set to be considered, such as `dunhamfit.inference.widest.widest_fit` makes.
    progress : callable, optional
    """
    search = _Search(Board(wide), progress)
    low = search.lowest()
    near_forward = search.climb(low, search.larger)
    for start in (near_forward, search.widest):
        search.climb(search.climb(start, search.smaller), search.larger)
    candidates = tuple(sorted(search.seen.values(), key=lambda item: (item.parameters, item.bic)))
    lowest = min(item.bic for item in candidates)
    near = tuple(sorted((item for item in candidates if item.bic <= lowest + NEAR_BIC), key=lambda item: item.bic))
    best = _recommended(near)
    return Selection(
        wide=wide,
        candidates=candidates,
        recommended=best,
        near_equal=near,
        weights=near_equal_weights(near),
        bands=search.board.bands,
        reason=_reason(best, near, len(candidates)),
    )


def near_equal_weights(near: Sequence[Candidate]) -> np.ndarray:
    """Share of each set, in proportion to the predictive density of all bands that every set can predict.

    A few bands decide which set predicts best; how far that is chance shows when bands are weighted at
    random (pseudo-Bayesian averaging with the Bayesian bootstrap: Y. Yao, A. Vehtari, D. Simpson and A. Gelman,
    Bayesian Anal. 13, 917 (2018)). The random weights are the same in every call.

    Returns
    -------
    ndarray of float, shape (near,)
        Sums to 1.
    """
    density = _common(near)
    bands = density.shape[1]
    if not bands:
        return np.full(len(near), 1 / len(near))
    draws = np.random.default_rng(0).dirichlet(np.ones(bands), _DRAWS)
    gain = bands * draws @ density.T
    shares = np.exp(np.maximum(gain - gain.max(axis=1, keepdims=True), -700.0))
    return (shares / shares.sum(axis=1, keepdims=True)).mean(axis=0)


def _common(near: Sequence[Candidate]) -> np.ndarray:
    """Log predictive density, shape (near, bands that every set can predict)."""
    density = np.stack([item.log_predictive for item in near])
    return density[:, np.isfinite(density).all(axis=0)]


def _recommended(near: Sequence[Candidate]) -> Candidate:
    """The smallest set of nearly the lowest BIC, all of whose last terms are told from zero.

    Smaller, since a term that the lines hardly need widens every prediction beyond them; the sets that
    have it stay among the near-equal ones.
    """
    certain = [item for item in near if item.smallest_t >= LEAST_T] or list(near)
    lowest = min(item.bic for item in certain)
    return min((c for c in certain if c.bic <= lowest + PLAIN_BIC), key=lambda item: (item.parameters, item.bic))


def _reason(best: Candidate, near: Sequence[Candidate], count: int) -> str:
    nearly = f"of {count} sets, {len(near)} lie within {NEAR_BIC:g} of the lowest BIC and are nearly equal"
    error = f"it misses left-out bands by {best.left_out_error:.3g} of the sigma of their lines"
    if best.smallest_t < LEAST_T:
        return (
            f"{nearly}; none of them has all last terms {LEAST_T:g} sigma from zero, and this one is the smallest "
            f"within {PLAIN_BIC:g} of the lowest BIC; {error}"
        )
    return (
        f"{nearly}; of those whose last terms are all at least {LEAST_T:g} sigma from zero, this one is the smallest "
        f"within {PLAIN_BIC:g} of the lowest BIC; {error}"
    )


class _Search:
    """Steps along the staircase; a set is given by its highest k for each l."""

    def __init__(self, board: Board, progress: Callable[[int, int], None] | None):
        self.board, self.progress = board, progress
        model = board.wide.model
        self.own = [term for term in model.terms if term.name in model.priors]
        self.widest = _tops(model.terms)
        self.seen: dict[tuple[int, ...], Candidate] = {}

    def lowest(self) -> tuple[int, ...]:
        """Y10 and Y01, as far as the wide set has them."""
        return tuple(min(top, 1 - l) if l < 2 else -1 for l, top in enumerate(self.widest))

    def judge(self, tops: tuple[int, ...]) -> Candidate:
        if tops not in self.seen:
            self.seen[tops] = self.board.judge(TermSet([*TermSet.from_orders(tops), *self.own]))
            if self.progress:
                self.progress(len(self.seen), len(self.seen))
        return self.seen[tops]

    def climb(self, here: tuple[int, ...], neighbours) -> tuple[int, ...]:
        """Move to the neighbour of lowest BIC as long as one is lower."""
        now = self.judge(here).bic
        while True:
            steps = [(self.judge(tops).bic, tops) for tops in neighbours(here)]
            if not steps or min(steps)[0] >= now:
                return here
            now, here = min(steps)

    def larger(self, tops: tuple[int, ...]) -> Iterator[tuple[int, ...]]:
        """Sets with one more term: the next k of some l, or the first of the next l."""
        for l, k in enumerate(tops):
            k = self._past_own(k + 1, l, 1)
            if k <= self.widest[l] and (l == 0 or k <= tops[l - 1]):
                yield (*tops[:l], k, *tops[l + 1 :])

    def smaller(self, tops: tuple[int, ...]) -> Iterator[tuple[int, ...]]:
        """Sets with one term less: the last k of some l that no higher l needs."""
        for l, k in enumerate(tops):
            k = self._past_own(k, l, -1) - 1
            after = tops[l + 1] if l + 1 < len(tops) else -1
            least = 0 if l == 0 else -1
            shorter = (*tops[:l], k, *tops[l + 1 :])
            if k >= max(least, after) and max(shorter) + sum(top >= 0 for top in shorter) > 1:
                yield shorter

    def _past_own(self, k: int, l: int, step: int) -> int:
        """The next k from here whose term has no prior: only such terms come and go."""
        while Term(k, l) in self.own:
            k += step
        return k


def _tops(terms: TermSet) -> tuple[int, ...]:
    """Highest k for each l that the terms hold without a gap, never more than for the l before."""
    tops: list[int] = []
    for l in range(max(term.l for term in terms) + 1):
        k = 0 if l == 0 else -1
        while Term(k + 1, l) in terms:
            k += 1
        tops.append(min(k, tops[-1]) if tops else k)
    return tuple(tops)
