"""A comparison of sets of terms as tables and as the JSON object of `select`."""

from __future__ import annotations

import math

from dunhamfit.inference.candidates import Candidate
from dunhamfit.inference.selection import NEAR_BIC, Selection
from dunhamfit.show.numbers import format_number
from dunhamfit.show.policy import policy_words
from dunhamfit.show.tables import Column, Table

# Candidates further than this from the lowest BIC are counted, not shown, unless all are asked for.
SHOWN_BIC = 50.0


def selection_document(selection: Selection) -> dict[str, object]:
    """The JSON object: every candidate, which is recommended and why."""
    return {
        "sets": [{**record, "terms": record["terms"].split()} for record in selection_records(selection)],
        "reason": selection.reason,
        "bands": list(selection.bands),
    }


def selection_records(selection: Selection) -> list[dict[str, object]]:
    """One record a candidate; None for what the lines cannot tell."""
    weights = dict(zip(map(id, selection.near_equal), selection.weights.tolist(), strict=True))
    return [
        {
            "terms": " ".join(item.terms.names),
            "parameters": item.parameters,
            "chi2": item.chi2,
            "reduced_chi2": _finite(item.reduced_chi2),
            "aicc": _finite(item.aicc),
            "bic": item.bic,
            "left_out_error": _finite(item.left_out_error),
            "smallest_t": _finite(item.smallest_t),
            "condition": item.condition,
            "near_equal": id(item) in weights,
            "weight": weights.get(id(item), 0.0),
            "recommended": item is selection.recommended,
        }
        for item in selection.candidates
    ]


def selection_tables(selection: Selection, *, everything: bool = False) -> tuple[Table, ...]:
    """The candidates by number of parameters, and the recommended terms.

    Parameters
    ----------
    selection : Selection
    everything : bool
        Show candidates of hopeless BIC too.
    """
    lowest = min(item.bic for item in selection.candidates)
    shown = [item for item in selection.candidates if everything or item.bic <= lowest + SHOWN_BIC]
    weights = dict(zip(map(id, selection.near_equal), selection.weights.tolist(), strict=True))
    rows = tuple(_row(item, selection, lowest, weights) for item in shown)
    columns = (
        Column("highest k for l = 0, 1, ..."),
        Column("parameters", "right"),
        Column("chi2", "decimal"),
        Column("reduced chi2", "decimal"),
        Column("AICc", "decimal"),
        Column("BIC above lowest", "decimal"),
        Column("left-out error", "decimal"),
        Column("smallest t", "decimal"),
        Column("condition", "right"),
        Column("weight", "decimal"),
        Column("remark"),
    )
    hidden = len(selection.candidates) - len(shown)
    notes = [
        f"Recommended: {' '.join(selection.recommended.terms.names)}. {selection.reason[0].upper()}"
        f"{selection.reason[1:]}.",
        f"All sets are judged with the noise factors of the widest one, "
        f"{', '.join(map(str, selection.wide.model.terms.orders))}: {policy_words(selection.wide)}",
        "Left-out error: root mean square of the errors of predicting each band from all others, over the "
        f"uncertainties of its lines ({len(selection.bands)} bands). Smallest t: least |value|/sigma of the highest k "
        "of each l. Weight: share of each near-equal set, from the probability it gives to left-out bands.",
    ]
    if hidden:
        notes.append(f"{hidden} sets more than {SHOWN_BIC:g} above the lowest BIC are not shown.")
    return (Table("Sets of terms", columns, rows, tuple(notes)),)


def _row(item: Candidate, selection: Selection, lowest: float, weights: dict[int, float]) -> tuple[str, ...]:
    remark = "recommended" if item is selection.recommended else "near-equal" if id(item) in weights else ""
    return (
        " ".join(map(str, item.terms.orders)),
        str(item.parameters),
        format_number(item.chi2, digits=5),
        format_number(item.reduced_chi2),
        f"{item.aicc:.1f}",
        f"{item.bic - lowest:.1f}",
        format_number(item.left_out_error, digits=3),
        format_number(item.smallest_t, digits=2),
        format_number(item.condition, digits=2),
        f"{weights[id(item)]:.2f}" if id(item) in weights else "",
        remark,
    )


def recommendation_words(selection: Selection) -> str:
    """What was chosen, why, and what comes close; for a fit that was left to choose."""
    best = selection.recommended
    others = [item for item in selection.near_equal if item is not best]
    text = f'terms = "auto" took {" ".join(best.terms.names)}: {selection.reason}'
    if others:
        close = "; ".join(", ".join(map(str, item.terms.orders)) for item in others[:5])
        text += f". Nearly equal (highest k for l = 0, 1, ...; BIC within {NEAR_BIC:g}): {close}"
    return text


def _finite(value: float) -> float | None:
    return value if math.isfinite(value) else None
