"""Derived constants, constants of isotopologues and vibrational levels: tables and the JSON document.

What is read here are declared fields only, of the records in `dunhamfit.results.derived`,
`dunhamfit.results.isotopologues` and `dunhamfit.results.vibrational`.
"""

from __future__ import annotations

import numpy as np

from dunhamfit.fit.record import Fit
from dunhamfit.show.numbers import format_value
from dunhamfit.show.policy import policy_words
from dunhamfit.show.tables import Column, Table
from dunhamfit.units import MHZ_PER_WAVENUMBER

_MEANING = {
    "G": "G(v) without Y00",
    "origin": "origin of band v-0",
    "B": "B_v",
    "D": "D_v",
    "H": "H_v",
}


def derive_document(derived, own, levels, masses, *, run: int) -> dict[str, object]:
    """The document that `derive --json` prints.

    Parameters
    ----------
    derived : DerivedConstants
    own : OwnConstants
    levels : VibrationalConstants
    masses : MassIndependent, or None where the fit has no such constants
    run : int
    """
    document = {
        "run": run,
        "isotopologue": derived.isotopologue,
        "constants": [_record(item.name, item.value, item.sigma, item.unit, item.definition) for item in derived.items],
        "covariance": derived.covariance.tolist(),
        "own": [
            {**_record(term.name, value, sigma, "cm-1", f"{term.name} of {derived.isotopologue}"), "sigma_masses": mass}
            for term, value, sigma, mass in zip(
                own.terms, own.values.tolist(), own.sigmas.tolist(), own.mass_sigmas.tolist(), strict=True
            )
        ],
        "own_covariance": own.covariance.tolist(),
        "levels": [
            {"v": int(v), **_record(name, float(values[v]), float(sigmas[v]), "cm-1", _MEANING[name])}
            for name, values, sigmas in zip(levels.names, levels.values, levels.sigmas, strict=True)
            for v in levels.v
        ],
        "remarks": list(derived.remarks),
    }
    if masses is not None:
        document["mass_independent"] = [
            {"name": name, "kind": kind, "k": int(k), "l": int(l), "atom": atom or None, "value": value, "sigma": sigma}
            | {"unit": _unit(kind, k, l), "determined": name not in masses.not_determined()}
            for name, kind, k, l, atom, value, sigma in zip(
                masses.names,
                masses.kinds,
                masses.k,
                masses.l,
                masses.atoms,
                masses.values.tolist(),
                masses.sigmas.tolist(),
                strict=True,
            )
        ]
        document["mass_independent_covariance"] = masses.covariance.tolist()
    return document


def derive_tables(derived, own, levels, masses, fit: Fit) -> list[Table]:
    """The same for a reader, top to bottom."""
    tables = [_derived_table(derived, fit), _levels_table(levels), _own_table(own, fit)]
    return tables if masses is None else [*tables, *_mass_tables(masses)]


def derive_records(document: dict[str, object]) -> list[dict[str, object]]:
    """The constants of the document as flat records."""
    return [dict(item) for item in document["constants"]]


def _record(name: str, value: float, sigma: float, unit: str, definition: str) -> dict[str, object]:
    factor = MHZ_PER_WAVENUMBER if unit == "cm-1" else None
    return {
        "name": name,
        "value": value,
        "sigma": sigma,
        "unit": unit,
        "value_MHz": value * factor if factor else None,
        "sigma_MHz": sigma * factor if factor else None,
        "definition": definition,
    }


def _derived_table(derived, fit: Fit) -> Table:
    rows = tuple(
        (
            item.name,
            format_value(item.value, item.sigma),
            item.unit,
            _in_mhz(item.value, item.sigma) if item.unit == "cm-1" else "",
            item.definition,
        )
        for item in derived.items
    )
    columns = (
        Column("constant"),
        Column("value(sigma)", "decimal"),
        Column("unit"),
        Column("value(sigma)", "decimal", "MHz"),
        Column("definition"),
    )
    notes = (
        policy_words(fit),
        "Signs: omega_e x_e = -Y20, alpha_e = -Y11, D_e = -Y02. Sigma contains the uncertainties of the atomic "
        "masses, and for r_e that of h/(8 pi^2 c u) (3.1e-10).",
        *(f"{text[0].upper()}{text[1:]}." for text in derived.remarks),
    )
    return Table(f"Derived constants of {derived.isotopologue}", columns, rows, notes)


def _levels_table(levels) -> Table:
    rows = tuple(
        (
            str(v),
            *(
                format_value(float(values[v]), float(sigmas[v]))
                for values, sigmas in zip(levels.values, levels.sigmas, strict=True)
            ),
        )
        for v in levels.v
    )
    columns = (Column("v", "right"), *(Column(_MEANING[name], "decimal", "cm-1") for name in levels.names))
    return Table(f"Vibrational levels of {levels.isotopologue}", columns, rows)


def _own_table(own, fit: Fit) -> Table:
    """Y_kl of the isotopologue; beside them those of the reference, where it is another one."""
    reference = fit.model.reference.name
    other = own.isotopologue.name != reference
    rows = []
    for term, value, sigma in zip(own.terms, own.values.tolist(), own.sigmas.tolist(), strict=True):
        row = (term.name, format_value(value, sigma), _in_mhz(value, sigma))
        if other:
            row += (format_value(fit.value(term.k, term.l), fit.sigma(term.k, term.l)),)
        rows.append(row)
    columns = (Column("constant"), Column("value(sigma)", "decimal", "cm-1"), Column("value(sigma)", "decimal", "MHz"))
    if other:
        columns += (Column(reference, "decimal", "cm-1"),)
    return Table(f"Dunham coefficients of {own.isotopologue.name}", columns, tuple(rows))


def _mass_tables(masses) -> list[Table]:
    chosen = {kind: np.flatnonzero(np.array(masses.kinds) == kind) for kind in ("U", "Delta")}
    rows = [
        (
            masses.names[i],
            format_value(float(masses.values[i]), float(masses.sigmas[i])),
            _unit("U", masses.k[i], masses.l[i]),
        )
        for i in chosen["U"]
    ]
    columns = (Column("constant"), Column("value(sigma)", "decimal"), Column("unit"))
    tables = [Table("Mass-independent constants", columns, tuple(rows))]
    if len(chosen["Delta"]):
        lost = masses.not_determined()
        rows = [
            (
                masses.names[i],
                format_value(float(masses.values[i]), float(masses.sigmas[i])),
                "not determined" if masses.names[i] in lost else "",
            )
            for i in chosen["Delta"]
        ]
        notes = ("Delta is the breakdown parameter of an atom in units of the electron mass over that of the atom.",)
        if lost:
            notes += (f"Not determined, within 2 sigma of zero: {', '.join(lost)}.",)
        columns = (Column("constant"), Column("value(sigma)", "decimal"), Column("remark"))
        tables.append(Table("Born-Oppenheimer breakdown", columns, tuple(rows), notes))
    return tables


def _unit(kind: str, k: int, l: int) -> str:
    """cm-1 u^(k/2 + l) for U; Delta is a number."""
    if kind != "U":
        return "1"
    power = f"{k / 2 + l:g}"
    return f"cm-1 u^{power}" if power != "1" else "cm-1 u"


def _in_mhz(value: float, sigma: float) -> str:
    return format_value(value * MHZ_PER_WAVENUMBER, sigma * MHZ_PER_WAVENUMBER)
