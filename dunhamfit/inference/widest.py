"""The widest fit worth considering: every staircase term that the lines can determine."""

from __future__ import annotations

from collections.abc import Callable

from dunhamfit.errors import CannotDetermine
from dunhamfit.fit.model import Model
from dunhamfit.fit.record import Fit
from dunhamfit.fit.solve import fit_model
from dunhamfit.lines.line_list import LineList
from dunhamfit.molecule.terms import TermSet, parse_indices

# Highest k for l = 0, 1, 2, ...: more than any published set of terms needs, before the lines are asked.
GENEROUS = (9, 7, 6, 5, 4, 3)
# Beyond this condition number the error bars of the wide fit lose more than nine digits.
_WELL_POSED = 1e8


def widest_fit(
    make: Callable[[TermSet], Model], lines: LineList, *, policy: str, orders: tuple[int, ...] = GENEROUS
) -> Fit:
    """The fit with the widest staircase of terms that the lines determine.

    Starts from `orders` and takes away, one after another, the terms that the refusal names,
    or the last term of the longest reach where the condition is beyond 1e8.

    Parameters
    ----------
    make : callable
        Makes the model for a set of terms; `dunhamfit.fit.solve.make_model` with the rest filled in.
    lines : LineList
    policy : str
        Error policy; factors are those of the widest set.
    orders : tuple of int
        Highest k for l = 0, 1, 2, ... to begin with.

    Raises
    ------
    CannotDetermine
        If not even Y10 and Y01 can be told.
    """
    # More powers of v than levels reach would only be told apart by the small shifts between isotopologues.
    highest = int(max(lines.v_upper[lines.used].max(initial=0), lines.v_lower[lines.used].max(initial=0)))
    tops = [min(k, highest) for k in orders]
    while True:
        terms = TermSet.from_orders(tops)
        try:
            # The policy costs more than the fit: it is asked for once, on the set that stands.
            fit = fit_model(make(terms), lines, policy="stated")
        except CannotDetermine as refusal:
            tops = _without(tops, refusal)
            continue
        if fit.statistics.condition > _WELL_POSED and len(terms) > 2:
            tops = _shorter(tops)
            continue
        return fit if policy == "stated" else fit_model(make(terms), lines, policy=policy)


def _without(tops: list[int], refusal: CannotDetermine) -> list[int]:
    lost = [parse_indices(name) for name in refusal.terms if name.startswith("Y")]
    if not lost:
        raise refusal
    shorter = list(tops)
    for k, l in lost:
        shorter[l] = min(shorter[l], k - 1)
    return _staircase(shorter, refusal)


def _shorter(tops: list[int]) -> list[int]:
    """Take away the term of highest k + 2l among those that end a column."""
    ends = [(k + 2 * l, l) for l, k in enumerate(tops) if k >= 0]
    l = max(ends)[1]
    return _staircase([k - (i == l) for i, k in enumerate(tops)], None)


def _staircase(tops: list[int], refusal: CannotDetermine | None) -> list[int]:
    """Never a longer column after a shorter one; columns without a term are dropped from the end."""
    kept = [min(tops[: l + 1]) if l else tops[0] for l in range(len(tops))]
    while kept and kept[-1] < 0:
        kept.pop()
    if not kept or kept == [0]:
        raise refusal or CannotDetermine("no set of terms can be told from the lines; add bands")
    return kept
