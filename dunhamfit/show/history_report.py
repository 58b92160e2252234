"""The runs of an archive, and whether they can be repeated: tables and JSON documents.

What is read here are declared fields only, of `dunhamfit.archive.runs.RunSummary` and
`dunhamfit.archive.lineage.RunCheck`.
"""

from __future__ import annotations

import math
from collections.abc import Iterable

from dunhamfit.show.numbers import format_number
from dunhamfit.show.tables import Column, Table


def history_document(runs: Iterable) -> dict[str, object]:
    """The document that `history --json` prints."""
    return {
        "runs": [
            {
                "run": item.run,
                "parent": item.parent,
                "time": item.time,
                "title": item.title,
                "lines": item.lines,
                "used": item.used,
                "sources": list(item.sources),
                "added": list(item.added),
                "error_policy": item.policy,
                "parameters": item.parameters,
                "reduced_chi2": item.reduced_chi2,
                "posterior": item.posterior,
                "identity": item.identity,
            }
            for item in runs
        ]
    }


def history_table(runs: Iterable, *, archive: str) -> Table:
    """One row a run, with what it added to the run that it was made after."""
    runs = {item.run: item for item in runs}
    rows = tuple(
        (
            str(item.run),
            "" if item.parent is None else str(item.parent),
            item.time[:16].replace("T", " "),
            str(item.lines),
            str(item.parameters),
            format_number(item.reduced_chi2),
            _what_it_did(item, runs.get(item.parent)),
            item.title,
        )
        for item in runs.values()
    )
    columns = (
        Column("run"),
        Column("after"),
        Column("time", unit="UTC"),
        Column("lines", "right"),
        Column("parameters", "right"),
        Column("reduced chi2", "decimal"),
        Column("what it added"),
        Column("title"),
    )
    return Table(f"Runs of {archive}", columns, rows)


def _what_it_did(item, parent) -> str:
    """In what a run differs from the one it was made after; the first run from nothing."""
    if parent is None:
        said = [f"sources {', '.join(item.sources)}"]
    else:
        said = [f"+ {name}" for name in item.added]
        said += [f"- {name}" for name in parent.sources if name not in item.sources]
        if item.used != parent.used and not said:
            said.append(f"{item.used - parent.used:+d} lines used")
        if item.parameters != parent.parameters:
            said.append(f"{item.parameters - parent.parameters:+d} parameters")
        if item.policy != parent.policy:
            said.append(f"policy {item.policy}")
        if item.identity == parent.identity:
            said.append("the same fit again")
        elif not said:
            said.append("a changed choice")
    if item.posterior:
        said.append("samples")
    return ", ".join(said)


def verify_document(checks: Iterable) -> dict[str, object]:
    """The document that `verify --json` prints."""
    checks = tuple(checks)
    return {
        "agrees": all(item.agrees for item in checks),
        "runs": [
            {
                "run": item.run,
                "agrees": item.agrees,
                "difference": item.difference,
                "where": item.where,
                "problems": list(item.problems),
            }
            for item in checks
        ],
    }


def verify_table(checks: Iterable, *, archive: str, tolerance: float) -> Table:
    """One row a run: whether its repeat agrees, and what differs most."""
    rows = tuple(
        (
            str(item.run),
            "agrees" if item.agrees else "DOES NOT AGREE",
            "" if math.isnan(item.difference) else f"{item.difference:.1e}",
            item.where if item.difference else "",
            "; ".join(item.problems),
        )
        for item in checks
    )
    columns = (
        Column("run"),
        Column("repeat"),
        Column("largest difference", "right"),
        Column("of"),
        Column("problem"),
    )
    if not any(row[4] for row in rows):
        columns, rows = columns[:4], tuple(row[:4] for row in rows)
    note = (
        "Every run was fitted again from what the archive holds. Differences are parts of a value, or of its sigma "
        f"where that is larger; a run agrees up to {tolerance:.0e}."
    )
    return Table(f"Runs of {archive} repeated", columns, rows, (note,))
