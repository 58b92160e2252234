"""The widest fit worth considering: every staircase term that the lines can determine."""

from __future__ import annotations

from dataclasses import replace
from types import MappingProxyType

from dunhamfit.algebra.rank import judge
from dunhamfit.errors import CannotDetermine
from dunhamfit.fit.design import build_design
from dunhamfit.fit.identify import check_structure
from dunhamfit.fit.model import Model
from dunhamfit.fit.record import Fit
from dunhamfit.fit.solve import fit_model
from dunhamfit.lines.line_list import LineList
from dunhamfit.molecule.terms import Term, TermSet, parse_indices

# Highest k for l = 0, 1, 2, ...: more than published sets of terms hold, before the lines are asked.
GENEROUS = (9, 7, 5, 4, 3, 2)
# Beyond this condition number the error bars of the wide fit lose more than nine digits.
_WELL_POSED = 1e8


def widest_fit(model: Model, lines: LineList, *, policy: str, orders: tuple[int, ...] = GENEROUS) -> Fit:
    """The fit with the widest staircase of terms that the lines determine.

    Starts from `orders` and takes away the terms that counting levels rules out, then the last
    term of the longest reach for as long as the condition is beyond 1e8. Only the set that
    stands is fitted: the others are judged by the columns of one triangle.

    Parameters
    ----------
    model : Model
        Breakdown terms, calibration terms, priors and masses; terms with a prior always stay. Its other
        terms do not count.
    lines : LineList
    policy : str
        Error policy; factors are those of the widest set.
    orders : sequence of int
        Highest k for l = 0, 1, 2, ... to begin with.

    Raises
    ------
    CannotDetermine
        If not even the first terms of l = 0 and 1 can be told, or a breakdown or calibration term cannot.
    """
    # More powers of v than levels reach would only be told apart by the small shifts between isotopologues.
    highest = int(max(lines.v_upper[lines.used].max(initial=0), lines.v_lower[lines.used].max(initial=0)))
    tops = _staircase([min(k, highest) for k in orders], None)
    widest = with_terms(model, tops)
    design = build_design(widest, lines)
    while True:
        candidate = with_terms(model, tops)
        try:
            check_structure(candidate, lines, design)
        except CannotDetermine as refusal:
            tops = _without(tops, refusal)
            continue
        break
    names = [item.name for item in widest.parameters]
    whole = design.rows.triangle().r
    while len(candidate.terms) > 2:
        columns = [names.index(n) for n, fixed in zip(candidate.names, candidate.fixed, strict=True) if not fixed]
        if judge(whole[:, columns]).condition < _WELL_POSED:
            break
        tops = _shorter(tops)
        candidate = with_terms(model, tops)
    return fit_model(candidate, lines, policy=policy)


def with_terms(model: Model, tops) -> Model:
    """The model with the terms up to the highest k of each l, and those with a prior of their own.

    Breakdown terms and their priors stay with the terms they belong to.
    """
    own = [term for term in model.terms if term.name in model.priors]
    terms = TermSet([*TermSet.from_orders(tops), *own])
    breakdown = tuple(item for item in model.breakdown if Term(item.k, item.l) in terms)
    names = {term.name for term in terms} | {item.name for item in breakdown}
    priors = {name: prior for name, prior in model.priors.items() if name in names}
    return replace(model, terms=terms, breakdown=breakdown, priors=MappingProxyType(priors))


def _without(tops: list[int], refusal: CannotDetermine) -> list[int]:
    lost = [parse_indices(name) for name in refusal.terms if name.startswith("Y")]
    lost = [(k, l) for k, l in lost if l < len(tops) and k <= tops[l]]
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
