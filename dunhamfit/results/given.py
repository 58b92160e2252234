"""Sets of constants to compare: those of a fit, and those that somebody wrote into a JSON file.

A file holds what `fit --json` prints, or an object or list of constants:

    {"isotopologue": "28Si32S", "constants": {"Y10": 749.6, "Y01": {"value": 0.3035, "sigma": 1e-7}}}
    [{"name": "B_e", "value": 9098.6, "sigma": 0.003, "unit": "MHz"}]

Names are those of the terms (`Y10`, `d10_Si`), or the conventional ones (`omega_e`, `alpha_e`, `D_e` ...),
whose signs are then turned to those of the terms. Numbers are in cm-1 unless a unit is given.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from dunhamfit.errors import UsageError
from dunhamfit.fit.model import Model
from dunhamfit.fit.record import Fit
from dunhamfit.molecule.terms import BreakdownTerm, Term, TermSet, parse_indices
from dunhamfit.results.derived import CONVENTIONAL
from dunhamfit.results.isotopologues import own_constants
from dunhamfit.units import MHZ_PER_WAVENUMBER

_BREAKDOWN = re.compile(r"d(\d\d|\d+,\d+)_([A-Z][a-z]?)", re.ASCII)
_UNITS = {"cm-1": 1.0, "MHz": 1 / MHZ_PER_WAVENUMBER, "GHz": 1e3 / MHZ_PER_WAVENUMBER}
_CONVENTIONAL = {name.replace(" ", ""): (k, l, sign) for name, k, l, sign, _ in CONVENTIONAL}


@dataclass(frozen=True, eq=False)
class ConstantSet:
    """Constants of one molecule, with the reference isotopologue that they belong to.

    Attributes
    ----------
    label : str
    model : Model
        Terms and breakdown terms only.
    values, sigmas : ndarray of float, shape (constants,), cm-1
        In the order of `model.constants`; NaN for a sigma that is not known.
    """

    label: str
    model: Model
    values: np.ndarray
    sigmas: np.ndarray

    @property
    def names(self) -> tuple[str, ...]:
        return tuple(item.name for item in self.model.constants)


def constants_of_fit(fit: Fit, label: str, isotopologue: str | None = None) -> ConstantSet:
    """Constants of a fit, calibration left out; for another isotopologue its own Y_kl alone."""
    model = fit.model
    if isotopologue is None or model.isotopologue(isotopologue).formula == model.reference.formula:
        plain = Model(model.reference, model.terms, model.breakdown, masses=model.masses)
        count = len(fit.constants)
        return ConstantSet(label, plain, fit.values[:count], fit.sigmas[:count])
    own = own_constants(fit, isotopologue)
    return ConstantSet(label, Model(own.isotopologue, own.terms, masses=model.masses), own.values, own.sigmas)


def constants_of_document(document: object, label: str, fit: Fit) -> ConstantSet:
    """Constants of a JSON document, for the molecule of `fit`.

    Raises
    ------
    UsageError
        For a document of another form, with what stands in the way.
    """
    isotopologue, entries = _entries(document, label)
    values: dict[Term | BreakdownTerm, tuple[float, float]] = {}
    for name, entry in entries:
        term, sign = _term(str(name), label)
        if term in values:
            raise UsageError(f"{label}: {term.name} is given twice")
        value, sigma = _number(entry, str(name), label)
        values[term] = sign * value, sigma
    terms = [term for term in values if isinstance(term, Term)]
    breakdown = tuple(term for term in values if isinstance(term, BreakdownTerm))
    if not terms:
        raise UsageError(f"{label}: there is no term among the constants, such as Y10")
    reference = fit.model.isotopologue(isotopologue) if isotopologue else fit.model.reference
    if not fit.model.knows(reference.name):
        raise UsageError(f"{label}: {reference.name} is no isotopologue of the molecule of the fit")
    model = Model(reference, TermSet(terms), breakdown, masses=fit.model.masses)
    keys = [BreakdownTerm(c.atom, c.k, c.l) if c.atom else Term(c.k, c.l) for c in model.constants]
    pairs = np.array([values[key] for key in keys])
    return ConstantSet(label, model, pairs[:, 0], pairs[:, 1])


def _entries(document: object, label: str) -> tuple[str | None, list[tuple[object, object]]]:
    """Isotopologue, if it is said, and (name, entry) pairs."""
    isotopologue = None
    if isinstance(document, Mapping):
        isotopologue = document.get("isotopologue")
        if "constants" not in document:
            raise UsageError(f"{label}: the object has no 'constants'")
        document = document["constants"]
    if isinstance(document, Mapping):
        entries = list(document.items())
    elif isinstance(document, list) and all(isinstance(item, Mapping) and "name" in item for item in document):
        entries = [(item["name"], item) for item in document]
    else:
        raise UsageError(f"{label}: 'constants' must be an object, or a list of objects with 'name' and 'value'")
    if isotopologue is not None and not isinstance(isotopologue, str):
        raise UsageError(f"{label}: 'isotopologue' must be a name")
    return isotopologue, entries


def _term(name: str, label: str) -> tuple[Term | BreakdownTerm, float]:
    """The term that a name stands for, and the sign by which its number is turned."""
    conventional = _CONVENTIONAL.get(name.replace(" ", ""))
    if conventional:
        k, l, sign = conventional
        return Term(k, l), sign
    breakdown = _BREAKDOWN.fullmatch(name)
    if breakdown:
        return BreakdownTerm(breakdown[2], *parse_indices(breakdown[1])), 1.0
    try:
        return Term(*parse_indices(name)), 1.0
    except UsageError as problem:
        raise UsageError(f"{label}: {problem}") from None


def _number(entry: object, name: str, label: str) -> tuple[float, float]:
    """Value and sigma in cm-1; NaN for a sigma that is not given."""
    unit, sigma = "cm-1", float("nan")
    if isinstance(entry, Mapping):
        unit = entry.get("unit") or unit
        entry = [entry.get("value"), entry.get("sigma")]
    if isinstance(entry, list) and len(entry) == 2:
        entry, given = entry
        sigma = float("nan") if given is None else given
    for number in (entry, sigma):
        if isinstance(number, bool) or not isinstance(number, int | float):
            raise UsageError(f"{label}: {name} must be a number, or a value with its sigma")
    if not np.isfinite(entry) or sigma < 0:
        raise UsageError(f"{label}: {name} must be finite, and its sigma not negative")
    if unit not in _UNITS:
        raise UsageError(f"{label}: the unit of {name} must be one of {', '.join(_UNITS)}")
    return entry * _UNITS[unit], sigma * _UNITS[unit]
