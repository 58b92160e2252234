"""The comparison of sets of terms that a fit's predictions take their model part from."""

from __future__ import annotations

from dataclasses import replace
from types import MappingProxyType

from dunhamfit.fit.model import Model
from dunhamfit.fit.record import Fit
from dunhamfit.inference.selection import Selection, select_terms
from dunhamfit.inference.widest import widest_fit
from dunhamfit.molecule.terms import Term, TermSet


def near_equal_sets(fit: Fit) -> Selection:
    """Compare all sets of terms on the lines of `fit`, with its breakdown and calibration terms and error policy.

    Breakdown terms and priors stay with the terms they belong to.

    Raises
    ------
    CannotDetermine
        If no set of terms can be told from the lines.
    """
    model = fit.model

    def make(terms: TermSet) -> Model:
        kept = tuple(item for item in model.breakdown if Term(item.k, item.l) in terms)
        names = {term.name for term in terms} | {item.name for item in kept}
        priors = {name: prior for name, prior in model.priors.items() if name in names}
        return replace(model, terms=terms, breakdown=kept, priors=MappingProxyType(priors))

    return select_terms(widest_fit(make, fit.lines, policy=fit.noise.policy))
