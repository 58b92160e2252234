"""Two sets of constants beside each other: tables and the JSON document.

What is read here are declared fields only, of `dunhamfit.results.compare.Comparison`.
"""

from __future__ import annotations

import math
from dataclasses import asdict

from dunhamfit.show.numbers import format_number, format_value
from dunhamfit.show.tables import Column, Table


def compare_document(comparison) -> dict[str, object]:
    """The document that `compare --json` prints."""
    return {
        "old": comparison.old,
        "new": comparison.new,
        "relation": comparison.relation,
        "constants": [{**asdict(item), "unit": "cm-1"} for item in comparison.constants],
        "only_old": [{"name": name, "value": value} for name, value in comparison.only_old],
        "only_new": [{"name": name, "value": value} for name, value in comparison.only_new],
        "signs": [asdict(item) for item in comparison.signs],
        "lines": asdict(comparison.lines),
        "lines_turned": None if comparison.lines_turned is None else asdict(comparison.lines_turned),
    }


def compare_parts(comparison) -> list[Table | str]:
    """The same for a reader, top to bottom; mismatched signs come first, since they explain the rest."""
    parts: list[Table | str] = []
    if comparison.signs:
        said = "\n".join(f"{item.text}." for item in comparison.signs)
        turned = comparison.lines_turned
        if turned.lines:
            said += (
                f"\nWith these signs turned, lines differ by {format_number(turned.rms, digits=2)} cm-1 rms "
                f"(largest {format_number(turned.largest, digits=2)} cm-1, {turned.where})."
            )
        parts.append(said)
    return [*parts, _constants_table(comparison), _lines_table(comparison)]


def _constants_table(comparison) -> Table:
    rows = []
    for item in comparison.constants:
        known = not math.isnan(item.sigma_shift)
        rows.append(
            (
                item.name,
                _value(item.old, item.sigma_old),
                _value(item.new, item.sigma_new),
                format_value(item.shift, item.sigma_shift) if known else format_number(item.shift, digits=3),
                format_number(item.shift / item.sigma_shift, digits=2) if known and item.sigma_shift else "",
                # What the note under the table says of every constant is not repeated.
                "" if item.why == comparison.words else item.why,
            )
        )
    columns = (
        Column("constant"),
        Column("old(sigma)", "decimal", "cm-1"),
        Column("new(sigma)", "decimal", "cm-1"),
        Column("shift(sigma)", "decimal", "cm-1"),
        Column("shift/sigma", "right"),
        Column("remark"),
    )
    if not any(row[-1] for row in rows):
        columns, rows = columns[:-1], [row[:-1] for row in rows]
    notes = (f"{comparison.words[0].upper()}{comparison.words[1:]}.",)
    for who, only in (("old", comparison.only_old), ("new", comparison.only_new)):
        if only:
            notes += (f"Only in the {who} set: {', '.join(name for name, _ in only)}.",)
    return Table(f"Constants: {comparison.old} (old) and {comparison.new} (new)", columns, tuple(rows), notes)


def _value(value: float, sigma: float) -> str:
    """Value(sigma), or the whole value where no sigma is known."""
    return format_value(value, 0.0 if math.isnan(sigma) else sigma)


def _lines_table(comparison) -> Table:
    lines = comparison.lines
    rows = tuple(
        (
            item.isotopologue,
            f"{item.v_upper}-{item.v_lower}",
            str(item.lines),
            format_number(item.largest, digits=2),
            format_number(item.rms, digits=2),
            format_number(item.mean, digits=2),
            format_number(item.rms_in_sigma, digits=2),
        )
        for item in lines.bands
    )
    columns = (
        Column("isotopologue"),
        Column("band"),
        Column("lines", "right"),
        Column("largest", "right", "cm-1"),
        Column("rms", "right", "cm-1"),
        Column("mean", "right", "cm-1"),
        Column("rms/sigma", "decimal"),
    )
    notes = ("New less old, for the used lines; sigma is the stated uncertainty of a line.",)
    if lines.lines:
        notes += (
            f"All {lines.lines} lines: rms {format_number(lines.rms, digits=2)} cm-1, largest "
            f"{format_number(lines.largest, digits=2)} cm-1 ({lines.where}).",
        )
    if lines.left_out:
        notes += (f"{lines.left_out} lines of isotopologues that one of the sets says nothing about are left out.",)
    return Table("Calculated lines", columns, rows, notes, keys=2)
