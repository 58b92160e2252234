"""`dunhamfit refit ARCHIVE`: the latest run again, with a new source or a changed choice."""

from __future__ import annotations

import math
import re
from dataclasses import dataclass, replace
from pathlib import Path

import click

from dunhamfit.archive.runs import StoredRun
from dunhamfit.archive.store import Archive, open_archive
from dunhamfit.cli.output import Output, json_option, quiet_option
from dunhamfit.errors import InputFaults, UsageError
from dunhamfit.fit.noise import POLICIES
from dunhamfit.fit.record import Fit
from dunhamfit.fit.update import update_fit
from dunhamfit.inference.arrival import check_arrival
from dunhamfit.inference.shifts import band_shifts, parameter_shifts, terms_within_reach
from dunhamfit.job.again import edited_lines, is_plain, job_of, new_sources, origin_of
from dunhamfit.job.run import fit_job, read_job_lines
from dunhamfit.job.tables import Job, read_job
from dunhamfit.lines.deferred import append_lines
from dunhamfit.lines.faults import raise_faults
from dunhamfit.lines.line_list import LineList
from dunhamfit.lines.request import FORMATS, SourceRequest
from dunhamfit.molecule.terms import TermSet
from dunhamfit.show.documents import fit_document
from dunhamfit.show.fit_report import calibration_table, constants_table, fit_tables
from dunhamfit.show.refit_report import (
    arrival_parts,
    band_shifts_table,
    noise_table,
    refit_document,
    shifts_table,
    terms_table,
)

# Longer lists are not read for the sake of a table: the refit itself needs none of the old lines.
_AT_HAND = 50_000


@click.command()
@click.argument("archive", type=click.Path(dir_okay=False, path_type=Path))
@click.option("--run", type=int, help="Number of the run to go on from; by default the last one.")
@click.option(
    "--add",
    "files",
    multiple=True,
    metavar="FILE",
    type=click.Path(path_type=Path),
    help="File of a new source; may be given several times.",
)
@click.option("--as", "name", metavar="SOURCE", help="Name of the new source; by default that of the file.")
@click.option("--format", "format_", type=click.Choice(FORMATS), default="delimited", show_default=True)
@click.option("--isotopologue", metavar="NAME", help="Of all new lines, or 1=12C16O,2=13C16O for HITRAN records.")
@click.option("--columns", metavar="KEY=COLUMN,...", help="Columns of a delimited file, by header name or number.")
@click.option("--band", metavar="2-0", help="Of all new lines, where the file has no columns for v.")
@click.option("--unit", default="cm-1", show_default=True, help="Of positions, uncertainties and --offset.")
@click.option("--uncertainty", type=float, help="Of lines without their own, in the unit.")
@click.option("--coverage-factor", type=float, help="k of the stated uncertainties.")
@click.option("--offset", metavar="SIGMA", help="1 sigma of an offset that the new lines share, or free.")
@click.option("--scale", metavar="SIGMA", help="1 sigma of a fractional error that they share, or free.")
@click.option("--use", metavar="CHOICE", help="Which new lines to use, such as 'v_upper <= 5'.")
@click.option("--delimiter", help="Of the columns: comma, tab, semicolon or blanks; guessed by default.")
@click.option("--decimal", default=".", show_default=True, help="Decimal sign.")
@click.option("--header/--no-header", default=None, help="Whether the first row names the columns; guessed by default.")
@click.option(
    "--repeats",
    type=click.Choice(["refuse", "both"]),
    default="refuse",
    show_default=True,
    help="What to do with two values of one line.",
)
@click.option("--terms", metavar="4,3,2,1", help="Other terms: highest k for each l, or names.")
@click.option("--policy", type=click.Choice(POLICIES), help="Another error policy.")
@click.option("--robust", metavar="LOSS", help="Another robust loss, or none.")
@click.option(
    "--job",
    "job_file",
    metavar="JOB",
    type=click.Path(path_type=Path),
    help="An edited job; sources that the archive holds are not read again.",
)
@click.option(
    "--hold-if-inconsistent",
    is_flag=True,
    help="Store nothing if new lines do not agree with the old constants; exit code 3.",
)
@json_option
@quiet_option
def command(
    archive: Path,
    run: int | None,
    files: tuple[Path, ...],
    name: str | None,
    format_: str,
    isotopologue: str | None,
    columns: str | None,
    band: str | None,
    unit: str,
    uncertainty: float | None,
    coverage_factor: float | None,
    offset: str | None,
    scale: str | None,
    use: str | None,
    delimiter: str | None,
    decimal: str,
    header: bool | None,
    repeats: str,
    terms: str | None,
    policy: str | None,
    robust: str | None,
    job_file: Path | None,
    hold_if_inconsistent: bool,
    as_json: bool,
    quiet: bool,
) -> int:
    """Repeat the latest run of ARCHIVE from the archive alone, with a new source or a changed choice."""
    if job_file is not None and (files or terms or policy or robust):
        raise UsageError("--job says everything about the fit; leave out --add, --terms, --policy and --robust")
    source = None
    if files:
        source = SourceRequest(
            name=name or files[0].stem,
            files=files,
            format=format_,
            isotopologue=_isotopologue(isotopologue),
            columns=_columns(columns),
            band=band,
            unit=unit,
            uncertainty=uncertainty,
            coverage_factor=coverage_factor,
            offset=_sigma("--offset", offset),
            scale=_sigma("--scale", scale),
            use=use,
            delimiter=delimiter,
            decimal=decimal,
            header=header,
            repeats=repeats,
        )
    changes = {"terms": _terms(terms), "policy": policy, "robust": robust}
    changes = {key: value for key, value in changes.items() if value is not None}
    output = Output(as_json=as_json, quiet=quiet)
    with open_archive(archive, mode="a") as store:
        number = run or store.latest_number()
        if number is None:
            raise UsageError(f"{archive}: the archive holds no run yet; make one with 'dunhamfit fit'")
        stored = store.stored(number)
        plan = _plan(stored, source, changes, None if job_file is None else read_job(job_file))
        return run_refit(store, stored, plan, output, hold=hold_if_inconsistent)


@dataclass(frozen=True, eq=False)
class Plan:
    """What a refit is to do.

    Attributes
    ----------
    job : Job
        The fit to make; its sources are the ones to be read.
    edited : Job or None
        The whole of an edited job.
    same : bool
        Whether the model, error policy and old lines are those of the stored run.
    """

    job: Job
    edited: Job | None
    same: bool


def run_refit(store: Archive, stored: StoredRun, plan: Plan, output: Output, *, hold: bool) -> int:
    """Test the new lines, merge them, store the run and hand over the result."""
    added, notices = _read(plan.job, output)
    old = stored.fit
    new = [] if added is None else [added.subset(added.source == code) for code in range(len(added.sources))]
    arrivals = [
        check_arrival(old, replace(part, source=0 * part.source, sources=(source,)))
        for part, source in zip(new, () if added is None else added.sources, strict=True)
    ]
    if hold and not all(item.agrees for item in arrivals):
        output.result(refit_document(arrivals), arrival_parts(arrivals))
        output.warn("nothing was merged or stored, since new lines do not agree with the old constants")
        return InputFaults.exit_code
    fit = _fit(stored, plan, added)
    made = plan.edited or plan.job
    run = store.save(
        fit,
        job_text=made.text,
        title=made.title,
        parent=stored.run,
        origin=origin_of(made),
        notices=notices,
    )
    for text in fit.warnings:
        output.warn(text)
    at_hand = len(fit.lines) <= _AT_HAND
    shifts, bands = parameter_shifts(old, fit, nested=plan.same), band_shifts(old, fit, nested=plan.same)
    terms = terms_within_reach(old, fit) if added is not None and plan.same and at_hand else ()
    document = {}
    if output.as_json:
        document = fit_document(fit, run=run, parent=stored.run, notices=notices)
        document |= refit_document(arrivals, shifts, bands, terms)
    parts = [*arrival_parts(arrivals), shifts_table(shifts, nested=plan.same)]
    parts += [band_shifts_table(bands)] if bands else []
    parts += [terms_table(terms)] if terms else []
    output.result(document, [*parts, *_fit_parts(fit, at_hand=at_hand)])
    output.remark(f"run {run} stored in {store.path}, after run {stored.run}")
    return 0


def _plan(stored: StoredRun, source: SourceRequest | None, changes: dict[str, object], edited: Job | None) -> Plan:
    if edited is not None:
        return Plan(replace(edited, sources=new_sources(edited, stored)), edited, same=False)
    before = job_of(stored)
    job = replace(before, **changes)
    same = is_plain(job) and all(getattr(before, key) == value for key, value in changes.items())
    return Plan(replace(job, sources=() if source is None else (source,)), None, same=same)


def _read(job: Job, output: Output) -> tuple[LineList | None, tuple[str, ...]]:
    """The lines of the sources that are new, and what was said while reading them."""
    if not job.sources:
        return None, ()
    reading = read_job_lines(replace(job, exclusions=()))
    for notice in reading.notices:
        output.warn(notice)
    raise_faults(reading.faults, rows_fine=sum(len(item.lines) for item in reading.readings))
    return reading.lines, reading.notices


def _fit(stored: StoredRun, plan: Plan, added: LineList | None) -> Fit:
    old = stored.fit
    if plan.edited is not None:
        return fit_job(plan.job, edited_lines(plan.edited, stored, added))
    if added is None:
        return fit_job(plan.job, old.lines)
    if plan.same:
        return update_fit(old, added)
    return fit_job(plan.job, append_lines(old.lines, added))


def _fit_parts(fit: Fit, *, at_hand: bool) -> list:
    if at_hand:
        return list(fit_tables(fit))
    parts = [constants_table(fit)]
    parts += [calibration_table(fit)] if len(fit.values) > len(fit.constants) else []
    return parts + ([noise_table(fit)] if fit.noise.names else [])


def _pairs(option: str, text: str) -> dict[str, str]:
    pairs = {}
    for part in text.split(","):
        key, sign, value = part.partition("=")
        if not (sign and key.strip() and value.strip()):
            raise UsageError(f"{option} must look like key=value,key=value (got {part!r})")
        pairs[key.strip()] = value.strip()
    return pairs


def _columns(text: str | None) -> dict[str, str | int] | None:
    if text is None:
        return None
    return {key: int(value) if value.isdecimal() else value for key, value in _pairs("--columns", text).items()}


def _isotopologue(text: str | None) -> str | dict[str, str] | None:
    return _pairs("--isotopologue", text) if text and "=" in text else text


def _sigma(option: str, text: str | None) -> float | None:
    if text is None or text == "free":
        return None if text is None else math.inf
    try:
        return float(text)
    except ValueError:
        raise UsageError(f"{option} must be a number or free (got {text!r})") from None


def _terms(text: str | None) -> TermSet | None:
    if text is None:
        return None
    words = [word for word in re.split(r"[,\s]+", text) if word]
    if words and all(re.fullmatch(r"-1|\d+", word) for word in words):
        return TermSet.from_orders([int(word) for word in words])
    return TermSet.from_names(words)
