"""What a run was made from, as a JSON text: model, masses, sources, error model, and hashes of the lines.

The SHA-256 of this text identifies the run. Floats are written with the digits that bring
back the same float; an infinite sigma (a free calibration term) is written "free".
"""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from dataclasses import asdict
from decimal import Decimal
from types import MappingProxyType

import numpy as np

from dunhamfit.errors import UsageError
from dunhamfit.fit.model import Model, Prior
from dunhamfit.fit.record import Fit
from dunhamfit.lines.line_list import LineList, Source
from dunhamfit.molecule.isotopologue import Isotopologue
from dunhamfit.molecule.masses import Mass, Masses
from dunhamfit.molecule.terms import BreakdownTerm, Term, TermSet

_FREE = "free"


def inputs_document(fit: Fit, *, stretches: list[dict], order: str, origin: Mapping) -> dict[str, object]:
    """The document of a fit.

    Parameters
    ----------
    fit : Fit
    stretches : list of dict
        Where its lines stand: source, count, and hashes of lines and exclusions, in the order of the list.
    order : str
        Hash of the order of the lines where sources were mixed, else empty.
    origin : mapping
        What else the fit was made with (see `Archive.save`).
    """
    model, lines = fit.model, fit.lines
    return {
        "reference": model.reference.name,
        "terms": [[int(term.k), int(term.l)] for term in model.terms],
        "breakdown": [[term.atom, int(term.k), int(term.l)] for term in model.breakdown],
        "priors": {name: _plain(asdict(prior)) for name, prior in model.priors.items()},
        "calibration": [_plain(asdict(source)) for source in model.calibration],
        "masses": {
            name: {"value": str(mass.value), "sigma": float(mass.sigma), "source": mass.source}
            for name, mass in _masses_used(model, lines).items()
        },
        "sources": [_plain(asdict(source)) for source in lines.sources],
        "isotopologues": list(lines.isotopologues),
        "reasons": list(lines.reasons),
        "lines": stretches,
        "order": order,
        "policy": fit.noise.policy,
        "robust": fit.robust,
        "origin": dict(origin),
    }


def as_text(document: object) -> str:
    """Canonical JSON text, ASCII only.

    Raises
    ------
    UsageError
        If something in it is neither text, number, truth value, list nor mapping.
    """
    try:
        return json.dumps(document, sort_keys=True, ensure_ascii=True, allow_nan=False)
    except (TypeError, ValueError) as error:
        raise UsageError(f"a run can be stored with texts, finite numbers, lists and mappings only ({error})") from None


def model_of(document: Mapping) -> Model:
    """The model that `inputs_document` described."""
    masses = Masses.ame2020()
    stored = {
        name: Mass(Decimal(mass["value"]), mass["sigma"], mass["source"]) for name, mass in document["masses"].items()
    }
    if any(masses.get(name) != mass for name, mass in stored.items()):
        masses = Masses({**masses, **stored})
    return Model(
        reference=Isotopologue.parse(document["reference"], masses),
        terms=TermSet(Term(k, l) for k, l in document["terms"]),
        breakdown=tuple(BreakdownTerm(atom, k, l) for atom, k, l in document["breakdown"]),
        calibration=tuple(source_of(item) for item in document["calibration"]),
        priors=MappingProxyType({name: Prior(**_numbers(item)) for name, item in document["priors"].items()}),
        masses=masses,
    )


def source_of(document: Mapping) -> Source:
    """A source from its part of the document."""
    values = _numbers(document).items()
    return Source(**{name: tuple(value) if isinstance(value, list) else value for name, value in values})


def _masses_used(model: Model, lines: LineList) -> dict[str, Mass]:
    """Masses of every isotopologue of the lines and of the reference, and all that are not the evaluation's own."""
    nuclides = dict.fromkeys(model.reference.nuclides)
    for name in lines.isotopologues:
        try:
            nuclides |= dict.fromkeys(model.isotopologue(name).nuclides)
        except UsageError:
            continue  # lines of another molecule, which no fit uses
    published = Masses.ame2020()
    if model.masses is not published:
        nuclides |= {name: None for name in model.masses if model.masses[name] != published.get(name)}
    return {name: model.masses[name] for name in nuclides}


def _plain(fields_of_a_record: dict) -> dict:
    plain = {}
    for name, value in fields_of_a_record.items():
        value = value.item() if isinstance(value, np.generic) else value
        plain[name] = _FREE if value == math.inf else value
    return plain


def _numbers(document: Mapping) -> dict:
    """The fields of a record; "free" is a sigma only where a number may stand."""
    return {
        name: math.inf if value == _FREE and name in ("offset", "scale", "sigma") else value
        for name, value in document.items()
    }
