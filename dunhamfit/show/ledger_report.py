"""The ledger as tables and as part of a JSON document."""

from __future__ import annotations

import math
from dataclasses import asdict

from dunhamfit.inference.ledger import Entry, Ledger, Shift
from dunhamfit.show.numbers import format_number, format_value
from dunhamfit.show.tables import Column, Table

# Longer lists are no list of single wrong lines; all are in the JSON document.
_SHOWN = 50


def ledger_tables(ledger: Ledger) -> tuple[Table, ...]:
    """Large lines, what the constants would be without them, and excluded lines; nothing where there is nothing."""
    tables = []
    if ledger.entries:
        tables.append(entries_table(ledger))
    if ledger.shifts:
        tables.append(shifts_table(ledger))
    if ledger.excluded:
        tables.append(excluded_table(ledger))
    return tuple(tables)


def entries_table(ledger: Ledger) -> Table:
    """The listed lines, with the rule and what may be wrong with each under them."""
    shown = ledger.entries[:_SHOWN]
    weighted = any(entry.weight != 1 for entry in ledger.entries)
    columns = [
        Column("where"),
        Column("line"),
        Column("off by", "right", "cm-1"),
        Column("sigma", "right", "cm-1"),
        Column("studentised", "decimal"),
        Column("leverage", "decimal"),
    ]
    rows = [(entry.place, entry.label, *_size(entry), format_number(entry.leverage, digits=2)) for entry in shown]
    if weighted:
        columns.append(Column("weight", "right"))
        rows = [(*row, format_number(entry.weight, digits=2)) for row, entry in zip(rows, shown, strict=True)]
    notes = [ledger.rule, *(f"{entry.place}: {entry.reason}" for entry in shown if entry.reason)]
    if len(shown) < len(ledger.entries):
        notes.append(f"{len(ledger.entries) - len(shown)} smaller ones are not shown; --json has them all.")
    if not ledger.settled:
        notes.append(
            "Leaving these out only makes more lines large: it is the stated uncertainties, the terms or a whole "
            "source that do not hold. The lines above are judged by the fit as it is."
        )
    if ledger.remark:
        notes.append(f"{ledger.remark[0].upper()}{ledger.remark[1:]}")
    return Table("Lines that do not belong", tuple(columns), tuple(rows), tuple(notes), keys=2)


def shifts_table(ledger: Ledger) -> Table:
    """Parameters with and without the listed lines."""
    rows = [
        (
            item.name,
            format_value(item.value, item.sigma),
            "" if math.isnan(item.without) else format_value(item.without, item.sigma_without),
            "" if math.isnan(item.size) else f"{item.size:+.2f}",
        )
        for item in ledger.shifts
    ]
    columns = (
        Column("constant"),
        Column("with", "decimal"),
        Column("without", "decimal"),
        Column("difference", "right", "sigma"),
    )
    notes = ("Constants and offsets in cm-1, scales as fractions; the difference in sigmas without the lines.",)
    return Table("Constants with and without the lines that do not belong", columns, tuple(rows), notes)


def excluded_table(ledger: Ledger) -> Table:
    """Lines that the job excludes by row, and how far off they are."""
    shown = ledger.excluded[:_SHOWN]
    columns = (
        Column("where"),
        Column("line"),
        Column("off by", "right", "cm-1"),
        Column("sigma", "right", "cm-1"),
        Column("studentised", "decimal"),
        Column("reason"),
    )
    rows = tuple((entry.place, entry.label, *_size(entry), entry.reason) for entry in shown)
    more = len(ledger.excluded) - len(shown)
    notes = (f"{more} more are not shown; --json has them all.",) if more else ()
    return Table("Lines excluded by the job", columns, rows, notes, keys=2)


def ledger_document(ledger: Ledger) -> dict[str, object]:
    """What `--json` says of single lines."""
    return {
        "rule": ledger.rule,
        "level": ledger.level,
        "tested": ledger.tested,
        "untested": ledger.untested,
        "settled": ledger.settled,
        "remark": ledger.remark,
        "entries": [_entry_document(entry) for entry in ledger.entries],
        "excluded": [_entry_document(entry) for entry in ledger.excluded],
        "shifts": [_shift_document(shift) for shift in ledger.shifts],
    }


def _entry_document(entry: Entry) -> dict[str, object]:
    proposal = entry.diagnosis.proposal if entry.diagnosis else None
    possible = entry.diagnosis.possible if entry.diagnosis else ()
    return {
        "source": entry.source,
        "place": entry.place,
        "line": entry.label,
        "off": entry.off,
        "sigma": entry.sigma,
        "studentised": entry.t,
        "residual": entry.residual,
        "leverage": entry.leverage,
        "weight": entry.weight,
        "reason": entry.reason,
        "proposal": asdict(proposal) if proposal else None,
        "possible": [asdict(item) for item in possible],
    }


def _shift_document(shift: Shift) -> dict[str, object]:
    return asdict(shift) | {"difference_in_sigma": shift.size}


def _size(entry: Entry) -> tuple[str, str, str]:
    return (
        format_number(entry.off, digits=3),
        format_number(entry.sigma, digits=2),
        format_number(entry.t, digits=3),
    )
