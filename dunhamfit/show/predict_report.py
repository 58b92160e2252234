"""Predicted lines and levels: tables and JSON documents.

What is read here are declared fields only, of `dunhamfit.results.predict.Predictions` and
`dunhamfit.results.levels.EnergyLevels`.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import asdict

from dunhamfit.fit.record import Fit
from dunhamfit.lines.line_list import branch_label
from dunhamfit.show.numbers import format_number, format_value
from dunhamfit.show.policy import policy_words
from dunhamfit.show.tables import Column, Table

_REACH = (
    "Reach: 'inside' where used lines of this isotopologue reach the v of every level and a J as high and one "
    "as low; 'other isotopologue' where only all isotopologues together do; else 'outside', where sigma says "
    "little about terms that the fit does not have."
)
_MASSES = "Sigma contains the uncertainties of the atomic masses."


def predict_document(records: list, *, run: int, validity: Iterable = ()) -> dict[str, object]:
    """The document that `predict --json` prints; `records` are those of the predictions."""
    document: dict[str, object] = {"run": run, "lines": records}
    validity = [asdict(item) for item in validity]
    return {**document, "validity": validity} if validity else document


def levels_document(
    records: list, *, run: int, validity: Iterable = (), covariance: object = None
) -> dict[str, object]:
    """The document that `levels --json` prints; `records` are those of the levels, `covariance` in cm-2."""
    document = {"run": run, "zero": "v = 0, J = 0 of each isotopologue", "levels": records}
    if covariance is not None:
        document["covariance"] = covariance
    validity = [asdict(item) for item in validity]
    return {**document, "validity": validity} if validity else document


def predict_table(records: list[Mapping[str, object]], fit: Fit) -> Table:
    """One row a line."""
    rows = tuple(
        (
            str(item["isotopologue"]),
            f"{item['v_upper']}-{item['v_lower']}",
            branch_label(item["j_upper"], item["j_lower"]),
            format_value(item["position"], item["sigma"]),
            *_parts(item),
            str(item["where"]),
        )
        for item in records
    )
    unit = str(records[0]["unit"]) if records else "cm-1"
    lead = (Column("isotopologue"), Column("band"), Column("line"), Column("position", "decimal", unit))
    return _with_spread("Predicted lines", lead, rows, records, fit, unit, keys=3)


def levels_table(records: list[Mapping[str, object]], fit: Fit) -> Table:
    """One row a level."""
    rows = tuple(
        (
            str(item["isotopologue"]),
            str(item["v"]),
            str(item["j"]),
            format_value(item["energy"], item["sigma"]),
            *_parts(item),
            str(item["where"]),
        )
        for item in records
    )
    unit = str(records[0]["unit"]) if records else "cm-1"
    lead = (Column("isotopologue"), Column("v", "right"), Column("J", "right"), Column("energy", "decimal", unit))
    return _with_spread("Energy levels above v = 0, J = 0", lead, rows, records, fit, unit, keys=3)


def validity_table(validity: Iterable, *, isotopologue: str, tolerance: float) -> Table:
    """Up to which J the levels of each v are known to `tolerance` (cm-1)."""
    rows = tuple(
        (
            str(item.v),
            ("" if item.limited else ">= ") + str(item.j_max) if item.j_max >= 0 else "none",
            str(item.j_observed) if item.j_observed >= 0 else "none",
        )
        for item in validity
    )
    columns = (Column("v", "right"), Column("highest J", "right"), Column("highest J observed", "right"))
    note = (
        f"Up to this J every level has a sigma of {tolerance:g} cm-1 or less, against v = 0, J = 0. Beyond the highest "
        "J observed, sigma holds only if the terms of the fit are all that matter."
    )
    return Table(f"Validity for {isotopologue}", columns, rows, (note,))


def _parts(item: Mapping[str, object]) -> tuple[str, ...]:
    names = ("sigma_fit", "sigma_calibration", "sigma_model")
    return tuple(_part(item[name], item["sigma"]) for name in names)


def _part(part: float | None, sigma: float) -> str:
    """A part of sigma; a millionth of it or less is nothing."""
    if part is None:
        return ""
    return format_number(part, digits=2) if part > 1e-6 * sigma else "0"


def _with_spread(title, lead, rows, records, fit: Fit, unit: str, *, keys: int) -> Table:
    """The table with the parts of sigma; those of calibration and terms only where there are any."""
    parts = (
        Column("of lines", "right", unit),
        Column("of calibration", "right", unit),
        Column("of terms", "right", unit),
    )
    columns = (*lead, *parts, Column("reach"))
    first = len(lead)
    empty = set()
    if len(fit.values) == len(fit.constants):
        empty.add(first + 1)
    notes = (policy_words(fit), _MASSES, _REACH)
    if all(item["sigma_model"] is None for item in records):
        empty.add(first + 2)
        notes = (*notes, "The choice of terms is not in sigma; --model-spread adds it.")
    kept = [i for i in range(len(columns)) if i not in empty]
    return Table(
        title,
        tuple(columns[i] for i in kept),
        tuple(tuple(row[i] for i in kept) for row in rows),
        notes,
        keys=keys,
    )
