"""The tables of a fit: constants, calibration, sources, bands."""

from __future__ import annotations

import math

from dunhamfit.fit.record import Fit
from dunhamfit.fit.summary import summarise_bands, summarise_sources
from dunhamfit.inference.influence import calibration_share
from dunhamfit.inference.systematics import find_systematics
from dunhamfit.inference.weighted import is_tied
from dunhamfit.show.diagnostics_report import striking, systematics_table
from dunhamfit.show.numbers import format_number, format_value
from dunhamfit.show.policy import policy_words
from dunhamfit.show.rounding import rounded_constants
from dunhamfit.show.tables import Column, Table


def fit_tables(fit: Fit) -> tuple[Table, ...]:
    """All tables of a fit, top to bottom; systematic residuals only where there are any."""
    tables = [constants_table(fit)]
    if len(fit.values) > len(fit.constants):
        tables.append(calibration_table(fit))
    tables += [sources_table(fit), bands_table(fit)]
    if fit.noise.policy == "per-band":
        tables.append(noise_table(fit))
    findings = () if is_tied(fit) else find_systematics(fit)
    return (*tables, systematics_table(findings)) if striking(findings) else tuple(tables)


def constants_table(fit: Fit) -> Table:
    """Constants as value(sigma), with the error policy under them."""
    printed, shares = rounded_constants(fit), calibration_share(fit)
    rows = []
    for index, constant in enumerate(fit.constants):
        value, sigma = float(fit.values[index]), float(fit.sigmas[index])
        size = format_number(abs(value) / sigma, digits=2) if sigma else ""
        share = format_number(float(shares[index]), digits=2) if sigma else ""
        rows.append((constant.name, printed.texts[index], size, share, fit.origins.get(constant.name, "")))
    columns = (
        Column("constant"),
        Column("value(sigma)", "decimal", "cm-1"),
        Column("|value|/sigma", "right"),
        Column("of which calibration", "right", "cm-1"),
        Column("fixed from"),
    )
    shown = [0, 1, 2, *([3] if shares.any() else []), *([4] if fit.origins else [])]
    columns, rows = tuple(columns[i] for i in shown), [tuple(row[i] for i in shown) for row in rows]
    stats = fit.statistics
    notes = (
        policy_words(fit),
        printed.note,
        f"chi2 {format_number(stats.chi2)} for {stats.dof} degrees of freedom against the stated uncertainties "
        f"(reduced {format_number(stats.reduced_chi2)}); condition of the scaled design "
        f"{format_number(stats.condition, digits=2)}; BIC {stats.bic:.1f}.",
    )
    return Table(f"Constants of {fit.model.reference.name}", columns, tuple(rows), notes)


def calibration_table(fit: Fit) -> Table:
    """Offset and scale errors of sources."""
    rows = []
    for index in range(len(fit.constants), len(fit.values)):
        item = fit.model.parameters[index]
        prior = fit.model.prior(item)
        rows.append(
            (
                item.source,
                item.kind,
                format_value(float(fit.values[index]), float(fit.sigmas[index])),
                "fraction" if item.unit == "1" else item.unit,
                "free" if prior is None else format_number(prior.sigma, digits=2),
            )
        )
    columns = (
        Column("source"),
        Column("error"),
        Column("value(sigma)", "decimal"),
        Column("unit"),
        Column("prior sigma", "right"),
    )
    return Table("Calibration", columns, tuple(rows), keys=2)


def sources_table(fit: Fit) -> Table:
    """Sources: lines, noise factors, residuals."""
    rows = []
    for item in summarise_sources(fit):
        factor = (
            "" if math.isnan(item.noise_factor) else format_value(item.noise_factor, _known(item.noise_factor_sigma))
        )
        rows.append(
            (
                item.name,
                str(item.lines),
                str(item.used),
                factor,
                _number(item.reduced_chi2),
                _number(item.mean_residual, digits=2),
            )
        )
    columns = (
        Column("source"),
        Column("lines", "right"),
        Column("used", "right"),
        Column("noise factor", "decimal"),
        Column("reduced chi2", "decimal"),
        Column("mean residual", "right", "cm-1"),
    )
    return Table("Sources", columns, tuple(rows))


def noise_table(fit: Fit) -> Table:
    """Noise factors of the bands, where each has its own."""
    noise = fit.noise
    rows = [
        (
            name,
            format_value(float(factor), float(sigma)) if known else "1 (too few lines)",
            f"{degrees:.1f}",
        )
        for name, factor, sigma, degrees, known in zip(
            noise.names, noise.factors, noise.sigmas, noise.degrees, noise.determined, strict=True
        )
    ]
    columns = (Column("band"), Column("noise factor", "decimal"), Column("degrees of freedom", "right"))
    return Table("Noise factors", columns, tuple(rows))


def bands_table(fit: Fit) -> Table:
    """Bands: lines, J range, residuals."""
    bands = summarise_bands(fit)
    rows = [
        (
            item.isotopologue,
            f"{item.v_upper}-{item.v_lower}",
            str(item.lines),
            str(item.used),
            f"{item.j_min}-{item.j_max}" if item.used else "",
            _number(item.rms, digits=3),
            _number(item.weighted_rms, digits=3),
            _number(item.mean_residual, digits=2),
        )
        for item in bands
        if item.used
    ]
    unused = sum(1 for item in bands if not item.used)
    columns = (
        Column("isotopologue"),
        Column("band"),
        Column("lines", "right"),
        Column("used", "right"),
        Column("J''", "right"),
        Column("rms", "right", "cm-1"),
        Column("weighted rms", "decimal"),
        Column("mean residual", "right", "cm-1"),
    )
    notes = ("Weighted rms is against the stated uncertainties.",)
    if unused:
        notes += (f"{unused} bands without a used line are not shown.",)
    return Table("Bands", columns, tuple(rows), notes, keys=2)


def _known(sigma: float) -> float:
    return 0.0 if math.isnan(sigma) else sigma


def _number(value: float, *, digits: int = 4) -> str:
    return "" if math.isnan(value) else format_number(value, digits=digits)
