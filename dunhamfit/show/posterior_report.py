"""Tables and the document of a posterior: fitted and sampled figures side by side, and whether to trust them."""

from __future__ import annotations

import math

from dunhamfit.inference.posterior import Posterior, Summary
from dunhamfit.show.numbers import format_number, format_value
from dunhamfit.show.tables import Column, Table


def posterior_tables(posterior: Posterior) -> tuple[Table, ...]:
    """Constants and calibration terms, then noise factors and the error model."""
    summary = posterior.summary()
    linear = [item for item in summary if not math.isnan(item.quantity.fitted) and not _is_noise(item)]
    others = [item for item in summary if item not in linear]
    tables = [_linear_table(posterior, linear)]
    if others:
        tables.append(_noise_table(others))
    return tuple(tables)


def posterior_document(posterior: Posterior) -> dict[str, object]:
    """The document that `sample --json` prints."""
    summary = posterior.summary()
    return {
        "constants": [_record(item) for item in summary if item.quantity.kind in ("term", "breakdown")],
        "calibration": [_record(item) for item in summary if item.quantity.kind in ("offset", "scale")],
        "noise_factors": [_record(item) for item in summary if _is_noise(item)],
        "error_parameters": [_record(item) for item in summary if item.quantity.kind == "error model"],
        "error_model": posterior.error_model,
        "draws": posterior.total,
        "discarded_steps": posterior.discarded,
        "exact": posterior.exact,
        "converged": posterior.converged,
        "stamp": posterior.stamp,
        "priors": list(posterior.priors),
        "notes": list(posterior.notes),
        "seed": posterior.seed,
    }


def _record(item: Summary) -> dict[str, object]:
    low, middle, high = item.quantiles or (None, None, None)
    return {
        "name": item.quantity.name,
        "kind": item.quantity.kind,
        "mean": item.mean,
        "sd": item.sd,
        "q16": low,
        "q50": middle,
        "q84": high,
        "ess": item.ess,
        "mcse": item.mcse,
        "fitted": item.quantity.fitted,
        "fitted_sigma": item.quantity.sigma,
        "unit": item.quantity.unit,
    }


def _is_noise(item: Summary) -> bool:
    return item.quantity.kind == "noise factor"


def _linear_table(posterior: Posterior, items: list[Summary]) -> Table:
    rows = [
        (
            item.quantity.name,
            format_value(item.quantity.fitted, item.quantity.sigma),
            format_value(item.mean, item.sd),
            format_number(item.sd / item.quantity.sigma, digits=3) if item.quantity.sigma else "",
            f"{item.ess:.0f}",
        )
        for item in items
    ]
    columns = (
        Column("constant"),
        Column("fit", "decimal"),
        Column("sampled", "decimal"),
        Column("sd/sigma", "right"),
        Column("effective draws", "right"),
    )
    notes = [note for note in (posterior.stamp, *posterior.notes, *posterior.priors) if note]
    if not posterior.exact:
        notes.append(
            f"{posterior.total} draws, seed {posterior.seed}; the first {posterior.discarded} steps of every walker "
            "are left out."
        )
    title = "Posterior, exact" if posterior.exact else f"Posterior, {posterior.error_model} errors"
    return Table(title, columns, tuple(rows), tuple(notes))


def _noise_table(items: list[Summary]) -> Table:
    rows = []
    for item in items:
        low, middle, high = item.quantiles or (math.nan, math.nan, math.nan)
        rows.append(
            (
                item.quantity.name,
                format_value(item.mean, item.sd),
                *("" if math.isnan(value) else format_number(value) for value in (low, middle, high)),
                f"{item.ess:.0f}",
                format_number(item.mcse, digits=2) if item.mcse else "",
            )
        )
    columns = (
        Column("factor"),
        Column("mean(sd)", "decimal"),
        Column("16 %", "decimal"),
        Column("50 %", "decimal"),
        Column("84 %", "decimal"),
        Column("effective draws", "right"),
        Column("Monte Carlo error", "right"),
    )
    return Table("Noise factors and error model", columns, tuple(rows))
