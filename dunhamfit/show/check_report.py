"""The tables of `check`: what was read, what the model-free checks found, and a quick look at each band."""

from __future__ import annotations

from math import isnan

from dunhamfit.lines.closure import Closure
from dunhamfit.lines.reading import Reading
from dunhamfit.lines.straight_line import BandLook, StraightLine
from dunhamfit.show.numbers import format_number, format_value
from dunhamfit.show.tables import Column, Table


def readings_table(names, readings: tuple[Reading, ...]) -> Table:
    """Rows read, used, excluded and rejected of every source."""
    rows = [
        (name, str(item.rows), str(item.used), str(item.excluded), str(item.rejected))
        for name, item in zip(names, readings, strict=True)
    ]
    columns = (
        Column("source"),
        *(Column(name, "right") for name in ("rows", "used", "excluded", "rejected")),
    )
    return Table("Sources as read", columns, tuple(rows))


def suspects_table(closure: Closure) -> Table:
    """Lines and bands that disagree with the others, before any model."""
    rows = [
        (
            item.place,
            item.isotopologue,
            f"{item.band} {item.line}".strip(),
            item.check,
            format_value(item.size, item.sigma),
            format_number(abs(item.size) / item.sigma, digits=2),
            ", ".join(item.rivals),
        )
        for item in closure.suspects
    ]
    columns = (
        Column("where"),
        Column("isotopologue"),
        Column("line or band"),
        Column("check"),
        Column("too high by", "decimal", "cm-1"),
        Column("|size|/sigma", "right"),
        Column("or instead"),
    )
    notes = [
        f"{closure.lines_tested} lines and {closure.bands_tested} bands tested against others, "
        f"{closure.lines_unchecked} lines have none to be tested against. Limit: {closure.critical:.2f} sigma, "
        "so that lists without errors and with true uncertainties show any suspect in "
        f"{closure.false_alarms:.0%} of cases.",
    ]
    if closure.redundancy > 0:
        notes.append(
            f"Reduced chi2 of the differences, all lines: {format_number(closure.chi2 / closure.redundancy)}."
        )
    for name in closure.overflowing:
        notes.append(f"{name}: too many suspects to list; the stated uncertainties do not hold there.")
    return Table("Suspects", columns, tuple(rows), tuple(notes), keys=3)


def looks_table(looks: tuple[BandLook, ...]) -> Table:
    """B and D of both levels of every band by the straight line through its combination differences."""
    rows = []
    for look in looks:
        levels = [(look.v_lower, look.lower)]
        if look.v_upper != look.v_lower:  # in pure rotation both levels are one and the same
            levels.append((look.v_upper, look.upper))
        rows += [_look_row(look, v, line) for v, line in levels if line is not None]
    columns = (
        Column("isotopologue"),
        Column("band"),
        Column("source"),
        Column("v", "right"),
        Column("B", "decimal", "cm-1"),
        Column("D", "decimal", "cm-1"),
        Column("weighted rms", "decimal"),
    )
    notes = (
        "[R(J-1) - P(J+1)]/(2J+1) against (2J+1)^2 has the intercept 2B - 3D and the slope -D of the lower level; "
        "R(J) - P(J) gives the upper level. Stated uncertainties; H and beyond are left out.",
    )
    return Table("Quick look at each band", columns, tuple(rows), notes, keys=2)


def _look_row(look: BandLook, v: int, line: StraightLine) -> tuple[str, ...]:
    rms = line.weighted_rms
    return (
        look.isotopologue,
        f"{look.v_upper}-{look.v_lower}",
        look.source,
        str(v),
        format_value(line.b, line.sigma_b),
        format_value(line.d, line.sigma_d),
        "" if isnan(rms) else format_number(rms, digits=3),
    )
