"""A refit for a reader: the new lines against the old constants, and what moved when they were merged."""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import asdict

from dunhamfit.fit.record import Fit
from dunhamfit.inference.arrival import Arrival, SharedShift
from dunhamfit.inference.shifts import BandShift, Shift, TermWithinReach
from dunhamfit.show.numbers import format_number, format_value
from dunhamfit.show.tables import Column, Table

# A list of bands longer than this is cut; the JSON document has all of them.
_BANDS_SHOWN = 10


def refit_document(
    arrivals: Iterable[Arrival],
    shifts: Iterable[Shift] = (),
    bands: Iterable[BandShift] = (),
    terms: Iterable[TermWithinReach] = (),
) -> dict[str, object]:
    """What `refit --json` adds to the document of the fit."""
    return {
        "before_merge": [{**asdict(item), "verdict": verdict(item)} for item in arrivals],
        "shifts": [asdict(item) for item in shifts],
        "band_shifts": [asdict(item) for item in bands],
        "terms_within_reach": [asdict(item) for item in terms],
    }


def arrival_parts(arrivals: Iterable[Arrival]) -> list[Table | str]:
    """One table of tests for all new sources, with a verdict for each, and one of lines that stand out."""
    arrivals = tuple(arrivals)
    if not arrivals:
        return []
    parts: list[Table | str] = [_tests_table(arrivals)]
    if any(item.deviations for item in arrivals):
        parts.append(_deviations_table(arrivals))
    return parts


def verdict(arrival: Arrival) -> str:
    """In words, whether the new lines agree with the old constants and what would make them."""
    name, count = f"Source {arrival.source}", len(arrival.deviations)
    lines = f"{count} single line{'s' if count > 1 else ''}"
    if arrival.agrees:
        text = f"{name} agrees with the constants before the merge"
        return f"{text}, but {lines} should be looked at." if count else f"{text}."
    text = f"{name} does NOT agree with the constants before the merge (5 % level)"
    kind, _, noisier = arrival.explanation.partition(" and ")
    if kind in ("offset", "scale"):
        shift = next(item for item in arrival.shifts if item.kind == kind)
        text = f"{text}; one {kind} of {_shift(shift)} for all of its lines explains it{_rival(arrival, shift)}"
        return f"{text}, with uncertainties multiplied by {arrival.scatter:.3g}." if noisier else f"{text}."
    if arrival.explanation == "single lines":
        return f"{text}; without {lines} it does."
    if arrival.explanation == "noise":
        return (
            f"{text}; it does if its uncertainties are multiplied by {arrival.scatter:.3g}, "
            "by which its lines scatter about constants of their own."
        )
    return (
        f"{text}; neither an offset, a scale, single lines nor larger uncertainties explain it. Look for a wrong "
        "assignment, unit or isotopologue, or for terms that the model lacks."
    )


def shifts_table(shifts: Iterable[Shift], *, nested: bool = True) -> Table:
    """Every parameter before and after, its shift in units of sigma, and how its sigma shrank."""
    rows = tuple(
        (
            item.name,
            format_value(item.old, item.sigma_old),
            format_value(item.new, item.sigma_new),
            "" if math.isnan(item.in_sigma) else f"{item.in_sigma:+.2f}",
            format_number(item.sigma_new / item.sigma_old, digits=3) if item.sigma_old else "",
        )
        for item in shifts
    )
    columns = (
        Column("parameter"),
        Column("before", "decimal"),
        Column("after", "decimal"),
        Column("shift/sigma", "decimal"),
        Column("sigma ratio", "decimal"),
    )
    if nested:
        note = (
            "The new fit holds the lines of the old one, so that sigma of a shift is the root of (sigma before)^2 - "
            "(sigma after)^2. None is given where sigma has not shrunk, which new noise factors can cause."
        )
        return Table("What the new lines moved", columns, rows, (note,))
    columns, rows = (*columns[:3], columns[4]), tuple((*row[:3], row[4]) for row in rows)
    note = "More than the lines has changed, so that no sigma of a shift follows from the two error bars."
    return Table("What the change moved", columns, rows, (note,))


def band_shifts_table(bands: Iterable[BandShift]) -> Table:
    """The old bands whose calculated positions moved most."""
    bands = tuple(bands)
    rows = tuple(
        (
            item.band,
            str(item.lines),
            format_number(item.shift, digits=3),
            "" if math.isnan(item.expected) else format_number(item.expected, digits=3),
        )
        for item in bands[:_BANDS_SHOWN]
    )
    columns = (Column("band"), Column("lines", "right"), Column("rms shift", "decimal"), Column("expected", "decimal"))
    notes = ("In stated uncertainties of the lines; calibration errors are not counted.",)
    if len(bands) > _BANDS_SHOWN:
        notes += (f"{len(bands) - _BANDS_SHOWN} bands that moved less are not shown.",)
    return Table("Old bands whose calculated positions moved most", columns, rows, notes)


def terms_table(terms: Iterable[TermWithinReach]) -> Table:
    """Terms that could come next, with what the lines say of each."""
    rows = tuple(
        (
            item.name,
            _or_not(item.sigma_old),
            _or_not(item.sigma),
            "" if math.isinf(item.sigma) else format_value(item.value, item.sigma),
            "" if math.isinf(item.sigma) else format_number(abs(item.value) / item.sigma, digits=2),
        )
        for item in terms
    )
    columns = (
        Column("term"),
        Column("sigma before", "right", "cm-1"),
        Column("sigma now", "right", "cm-1"),
        Column("would be", "decimal", "cm-1"),
        Column("|value|/sigma", "right"),
    )
    notes = ("Each beside all terms of the model, which does not have it; 'dunhamfit select' compares whole sets.",)
    return Table("Terms within reach", columns, rows, notes)


def noise_table(fit: Fit) -> Table:
    """Noise factors alone, for archives whose old lines were not read."""
    rows = tuple(
        (name, format_value(float(factor), 0.0 if math.isnan(sigma) else float(sigma)))
        for name, factor, sigma in zip(fit.noise.names, fit.noise.factors, fit.noise.sigmas, strict=True)
    )
    return Table("Noise factors", (Column("of"), Column("factor", "decimal")), rows)


def _tests_table(arrivals: tuple[Arrival, ...]) -> Table:
    rows = []
    for item in arrivals:
        rows.append((item.source, "all lines", "", format_number(item.chi2), str(item.dof), _p(item.p)))
        for shift in item.shifts:
            rows.append((item.source, f"a shared {shift.kind}", _shift(shift), "", "1", _p(shift.p)))
            rows.append(
                (
                    item.source,
                    f"the rest beside this {shift.kind}",
                    "",
                    format_number(shift.chi2),
                    str(shift.dof),
                    _p(shift.p_rest),
                )
            )
    columns = (
        Column("source"),
        Column("test"),
        Column("value(sigma)", "decimal"),
        Column("chi2", "decimal"),
        Column("dof", "right"),
        Column("p", "right"),
    )
    notes = tuple(verdict(item) for item in arrivals)
    notes += tuple(
        f"{item.source}: {item.lines} lines, rms {format_number(item.rms, digits=3)} cm-1 and mean "
        f"{format_number(item.mean_residual, digits=2)} cm-1 about the old constants"
        + (
            "."
            if math.isnan(item.scatter)
            else f"; {item.scatter:.3g} stated uncertainties about constants of its own."
        )
        for item in arrivals
    )
    notes += (
        "With the full covariance of the old fit and the stated uncertainties of the new lines: their noise factor "
        "is not known before the merge.",
    )
    return Table("New lines against the old constants", columns, tuple(rows), notes)


def _deviations_table(arrivals: tuple[Arrival, ...]) -> Table:
    rows = tuple(
        (line.label, line.place, format_number(line.residual, digits=3), f"{line.in_sigma:+.1f}", _p(line.p))
        for item in arrivals
        for line in item.deviations
    )
    columns = (
        Column("line"),
        Column("place"),
        Column("residual", "right", "cm-1"),
        Column("in sigma", "decimal"),
        Column("p", "right"),
    )
    notes = ("From what the old constants and the other new lines predict; p allows for the number of lines.",)
    return Table("New lines that stand out", columns, rows, notes)


def _rival(arrival: Arrival, shift: SharedShift) -> str:
    """The other kind of shift, where the lines cannot tell the two apart: chi2 differs by less than 4 (2 sigma)."""
    for other in arrival.shifts:
        if other.kind != shift.kind and other.chi2 - shift.chi2 < 4.0:
            return f", and so does one {other.kind} of {_shift(other)}"
    return ""


def _shift(shift: SharedShift) -> str:
    text = format_value(shift.value, shift.sigma)
    return f"{text} cm-1" if shift.kind == "offset" else text


def _or_not(sigma: float) -> str:
    return "not determined" if math.isinf(sigma) else format_number(sigma, digits=2)


def _p(value: float) -> str:
    return "" if math.isnan(value) else format_number(min(value, 1.0), digits=2)
