"""Tables that question a fit: systematic residuals, influence, leave-one-out, bootstrap, coverage."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict

import numpy as np

from dunhamfit.algebra.criteria import two_sided_tail
from dunhamfit.fit.record import Fit
from dunhamfit.inference.influence import Influence, influence
from dunhamfit.inference.resample import Bootstrap, DroppedGroup, leave_one_out
from dunhamfit.inference.simulate import Coverage
from dunhamfit.inference.systematics import LEVEL, Finding, find_systematics, in_words
from dunhamfit.show.numbers import format_number, format_value
from dunhamfit.show.tables import Column, Table

# Where a model does not fit at all, everything stands out; the first few say it.
_ROWS, _SENTENCES = 12, 4
# Coverage farther from what is claimed than this many binomial standard deviations is pointed at.
_STRIKING = 3.0
# Chance of any false alarm over the shifts of all constants in one table.
_SHIFT_LEVEL = 0.05


def diagnostics_tables(fit: Fit) -> tuple[Table, ...]:
    """Systematic residuals, who determines what, and the fit without each source and band."""
    tables = [systematics_table(find_systematics(fit))]
    sources = influence(fit)
    if len(sources.dropped) > 1:
        tables += [influence_table(fit, sources), dropped_table(fit, sources.dropped, "source")]
    bands = leave_one_out(fit, "band")
    return (*tables, dropped_table(fit, bands, "band")) if len(bands) > 1 else tuple(tables)


def striking(findings: Sequence[Finding]) -> list[Finding]:
    """Those that stand out with all tests allowed for."""
    return [item for item in findings if item.adjusted < LEVEL]


def systematics_table(findings: Sequence[Finding]) -> Table:
    """The tests that stand out with all of them allowed for, and what they say in words."""
    shown = striking(findings)
    rows = tuple(
        (
            item.source,
            item.band or "all",
            str(item.lines),
            item.test,
            item.against,
            format_number(item.z, digits=2),
            format_number(item.p, digits=1),
            format_number(item.adjusted, digits=1),
        )
        for item in shown[:_ROWS]
    )
    columns = (
        Column("source"),
        Column("band"),
        Column("lines", "right"),
        Column("test"),
        Column("along"),
        Column("size/sigma", "decimal"),
        Column("p", "right"),
        Column("p of all", "right"),
    )
    notes = tuple(f"{in_words(item)}." for item in shown[:_SENTENCES])
    if not shown:
        notes = (f"None of {len(findings)} tests of residuals stands out.",)
    if len(shown) > _ROWS:
        notes += (f"{len(shown) - _ROWS} more tests stand out and are not shown.",)
    notes += (f"p of all allows for all {len(findings)} tests (Holm): {100 * LEVEL:g} % for any false alarm.",)
    return Table("Systematic residuals", columns, rows, notes, keys=2)


def influence_table(fit: Fit, found: Influence) -> Table:
    """Part of the variance of each constant that each source or band contributes, in percent."""
    rows = tuple(
        (item.name, *(f"{100 * share:.1f}" for share in found.shares[:, index]))
        for index, item in enumerate(fit.constants)
        if found.shares[:, index].any()
    )
    columns = (Column("constant"), *(Column(label, "decimal", "%") for label in found.labels))
    notes = ("Part of the variance of each constant that comes from the noise of each; rows add up to 100 %.",)
    return Table("Who determines which constant", columns, rows, notes)


def dropped_table(fit: Fit, dropped: Sequence[DroppedGroup], by: str) -> Table:
    """What the fit without each source or band says: its prediction of it, and the constant that moves most."""
    count = len(fit.constants)
    rows = tuple(_dropped_row(fit, item, count) for item in dropped)
    columns = (
        Column(f"without {by}"),
        Column("lines", "right"),
        Column("prediction chi2/n", "decimal"),
        Column("p", "right"),
        Column("moves most"),
        Column("by", "right", "cm-1"),
        Column("of its sigma", "decimal"),
        Column("shift/its own sigma", "decimal"),
        Column("not determined then"),
    )
    notes = (
        f"Prediction of the lines of each {by} by all others, chi2 over the full covariance; shifts are judged by "
        "sqrt(diag(C_without - C)).",
    )
    each = _SHIFT_LEVEL / (count * len(dropped))
    far = [item.label for item in dropped if item.determined and two_sided_tail(_largest(item, count)[1]) < each]
    if far:
        notes += (f"Constants move farther than chance allows for without {', '.join(far)}.",)
    return Table(f"Without each {by}", columns, rows, notes)


def bootstrap_table(fit: Fit, found: Bootstrap) -> Table:
    """Spread of the constants over resamples beside their sigma."""
    low, middle, high = found.percentiles()
    rows = tuple(
        (
            item.name,
            format_value(float(fit.values[index]), float(fit.sigmas[index])),
            format_number(float(found.sigmas[index]), digits=2),
            format_number(float(found.sigmas[index] / fit.sigmas[index]), digits=3),
            *(format_number(float(edge[index] - fit.values[index]), digits=2) for edge in (low, middle, high)),
        )
        for index, item in enumerate(fit.constants)
        if fit.sigmas[index]
    )
    columns = (
        Column("constant"),
        Column("value(sigma)", "decimal", "cm-1"),
        Column("bootstrap sd", "right", "cm-1"),
        Column("sd/sigma", "decimal"),
        Column("15.9 % less value", "right"),
        Column("50 % less value", "right"),
        Column("84.1 % less value", "right"),
    )
    notes = (f"{len(found.values)} resamples by {found.by}, seed {found.seed}.",)
    if found.undetermined:
        notes += (f"{found.undetermined} further resamples could not determine the constants and are left out.",)
    return Table(f"Bootstrap by {found.by}", columns, rows, notes)


def coverage_tables(found: Coverage) -> tuple[Table, ...]:
    """Coverage of the constants, and the noise factors found where there are any."""
    return (coverage_table(found), factors_table(found)) if found.noise_names else (coverage_table(found),)


def factors_table(found: Coverage) -> Table:
    """Noise factors of the simulated line lists, which know the true ones."""
    rows = tuple(
        (name, f"{true:.3f}", f"{each.mean():.3f}", f"{each.std():.3f}")
        for name, true, each in zip(found.noise_names, found.noise_true, found.noise.T, strict=True)
    )
    columns = (
        Column("noise factor of"),
        Column("true", "decimal"),
        Column("mean found", "decimal"),
        Column("spread", "decimal"),
    )
    return Table("Noise factors found", columns, rows)


def coverage_table(found: Coverage) -> Table:
    """How often the interval of each constant held the truth, against what it claims."""
    percent = 100 * found.covered
    rms = np.sqrt((found.z**2).mean(axis=0))
    off = np.abs(found.covered - np.array(found.levels)[:, None]) > _STRIKING * found.covered_sigmas[:, None]
    rows = tuple(
        (name, *(f"{value:.1f}" for value in percent[:, index]), f"{rms[index]:.3f}")
        for index, name in enumerate(found.names)
    )
    columns = (
        Column("constant"),
        *(Column(f"{100 * level:.1f} % interval", "decimal", "%") for level in found.levels),
        Column("rms of error/sigma", "decimal"),
    )
    spread = " and ".join(f"{100 * sigma:.1f}" for sigma in found.covered_sigmas)
    notes = [
        f"Part of {found.sets} simulated line lists whose interval held the true constant, seed {found.seed}; "
        f"by chance it spreads by {spread} %. The lists have the noise and the calibration errors that the fit "
        "assumes: what it leaves out is not tested here.",
    ]
    student = float(found.factors[0].max())
    if student > 1.005:
        notes.append(
            f"Intervals are sigma times Student's factor, up to {student:.3f} at {100 * found.levels[0]:.1f} %."
        )
    if found.failures:
        notes.append(f"{len(found.failures)} further sets gave no constants; the first one: {found.failures[0]}")
    named = [name for index, name in enumerate(found.names) if off[:, index].any()]
    notes.append(
        f"Coverage differs from what is claimed by more than {_STRIKING:g} standard deviations: {', '.join(named)}."
        if named
        else f"No coverage differs from what is claimed by more than {_STRIKING:g} standard deviations."
    )
    return Table("Coverage of the error bars", columns, rows, tuple(notes))


def coverage_document(found: Coverage) -> dict[str, object]:
    """The object that `selftest --json` prints."""
    return {
        "format": "dunhamfit-coverage/1",
        "sets": found.sets,
        "failed": len(found.failures),
        "seed": found.seed,
        "levels": list(found.levels),
        "level_sigmas": found.covered_sigmas.tolist(),
        "constants": [
            {
                "name": name,
                "coverage": found.covered[:, index].tolist(),
                "interval_in_sigma": found.factors[:, index].tolist(),
                "rms_z": float(np.sqrt((found.z[:, index] ** 2).mean())),
                "mean_z": float(found.z[:, index].mean()),
            }
            for index, name in enumerate(found.names)
        ],
        "noise_factors": [
            {"name": name, "true": float(true), "mean": float(of.mean()), "sd": float(of.std())}
            for name, true, of in zip(found.noise_names, found.noise_true, found.noise.T, strict=True)
        ],
    }


def systematics_document(findings: Sequence[Finding]) -> list[dict[str, object]]:
    """Every test as a record, for JSON and CSV."""
    return [{**asdict(item), "z": item.z} for item in findings]


def influence_document(fit: Fit, found: Influence) -> list[dict[str, object]]:
    """Part of the variance of each constant from each source, for JSON."""
    return [
        {"name": item.name, "shares": dict(zip(found.labels, found.shares[:, index].tolist(), strict=True))}
        for index, item in enumerate(fit.constants)
    ]


def dropped_document(fit: Fit, dropped: Sequence[DroppedGroup]) -> list[dict[str, object]]:
    """The fit without each band or source: shifts of the constants, and how well it predicts what was left out."""
    return [
        {
            "without": item.label,
            "lines": item.lines,
            "determined": item.determined,
            "undetermined": list(item.undetermined),
            "chi2": item.chi2,
            "dof": item.dof,
            "p": item.p,
            "shifts": dict(zip((c.name for c in fit.constants), item.shifts[: len(fit.constants)], strict=True)),
        }
        for item in dropped
    ]


def _dropped_row(fit: Fit, item: DroppedGroup, count: int) -> tuple[str, ...]:
    if not item.determined:
        return (item.label, str(item.lines), "", "", "", "", "", "", ", ".join(item.undetermined))
    index, size = _largest(item, count)
    return (
        item.label,
        str(item.lines),
        format_number(item.chi2 / max(item.dof, 1), digits=3),
        format_number(item.p, digits=2),
        fit.constants[index].name,
        format_number(float(item.shifts[index]), digits=2),
        format_number(abs(float(item.shifts[index])) / float(fit.sigmas[index]), digits=2),
        format_number(size, digits=2),
        "",
    )


def _largest(item: DroppedGroup, count: int) -> tuple[int, float]:
    """The constant that moves most, and by how much in units of the standard deviation of its shift."""
    spread = item.shift_sigmas[:count]
    size = np.divide(np.abs(item.shifts[:count]), spread, out=np.zeros(count), where=spread > 0)
    return int(np.argmax(size)), float(size.max())
