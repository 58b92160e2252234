"""Fits whose constants are given, for checks of what is derived from constants alone."""

from __future__ import annotations

import numpy as np

from dunhamfit.fit.design import build_design
from dunhamfit.fit.model import Model
from dunhamfit.fit.noise import as_stated
from dunhamfit.fit.record import Fit, Statistics
from dunhamfit.lines.line_list import LineList, Source
from dunhamfit.molecule.isotopologue import Isotopologue
from dunhamfit.molecule.masses import Masses
from dunhamfit.molecule.terms import BreakdownTerm, TermSet


def fit_with(constants, *, reference: str, breakdown=None, masses: Masses | None = None) -> Fit:
    """A Fit that has these values, without uncertainty; its four lines only say what was observed.

    Parameters
    ----------
    constants : mapping from (k, l) to cm-1
    breakdown : mapping from (atom, k, l) to cm-1, optional
    """
    masses, breakdown = masses or Masses.ame2020(), breakdown or {}
    model = Model(
        reference=Isotopologue.parse(reference, masses),
        terms=TermSet(constants),
        breakdown=tuple(BreakdownTerm(*key) for key in breakdown),
        masses=masses,
    )
    values = np.array(
        [breakdown[c.atom, c.k, c.l] if c.atom else constants[c.k, c.l] for c in model.constants], dtype=float
    )
    four, zero = np.arange(4), np.zeros(4)
    lines = LineList(
        position=1.0 + four, sigma=np.ones(4), v_upper=zero + 1, j_upper=four + 1, v_lower=zero, j_lower=four,
        isotopologue=zero, source=zero, file=zero, row=four, exclusion=zero,
        isotopologues=(reference,), sources=(Source("none"),),
    )  # fmt: skip
    groups = build_design(model, lines).groups
    nothing = Statistics(4, len(values), 0, 0.0, 0.0, 1.0, 0.0, 0.0, 0.0)
    factor = np.zeros((len(values), 0))
    return Fit(
        model=model,
        lines=lines,
        values=values,
        factor=factor,
        noise=as_stated(groups),
        groups=groups,
        statistics=nothing,
    )
