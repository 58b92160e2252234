"""`dunhamfit fit JOB`: the global fit."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import click

from dunhamfit.archive.store import open_archive
from dunhamfit.cli.output import Output, json_option, quiet_option
from dunhamfit.fit.record import Fit
from dunhamfit.inference.ledger import Ledger, make_ledger
from dunhamfit.job.again import origin_of
from dunhamfit.job.run import fit_job, read_job_lines
from dunhamfit.job.tables import Job, read_job
from dunhamfit.lines.faults import raise_faults
from dunhamfit.show.documents import fit_document
from dunhamfit.show.fit_report import fit_tables
from dunhamfit.show.ledger_report import ledger_document, ledger_tables
from dunhamfit.show.tables import Table


@click.command()
@click.argument("job", type=click.Path(path_type=Path))
@click.option(
    "-o",
    "archive",
    metavar="ARCHIVE",
    type=click.Path(dir_okay=False, path_type=Path),
    help="Archive to append the run to; by default the one that the job names.",
)
@json_option
@quiet_option
def command(job: Path, archive: Path | None, as_json: bool, quiet: bool) -> None:
    """Fit one set of constants to all lines of JOB and append the run to the archive."""
    run_fit(read_job(job), archive, Output(as_json=as_json, quiet=quiet))


def run_fit(job: Job, archive: Path | None, output: Output) -> Fit:
    """Fit a job, store the run, hand over the result."""
    reading = read_job_lines(job)
    for notice in reading.notices:
        output.warn(notice)
    raise_faults(reading.faults, rows_fine=sum(len(item.lines) for item in reading.readings))
    fit = fit_job(job, reading.lines)
    path = archive or job.archive
    with open_archive(path, mode="a") as store:
        parent = store.latest_number()
        origin = origin_of(job)
        run = store.save(
            fit, job_text=job.text, title=job.title, parent=parent, origin=origin, notices=reading.notices
        )
    for text in fit.warnings:
        output.warn(text)
    ledger = make_ledger(fit, refit=lambda lines: fit_job(job, lines))
    document: dict[str, object] = {}
    if output.wants_document:
        document = fit_document(fit, run=run, parent=parent, notices=reading.notices)
        document["ledger"] = ledger_document(ledger)
    output.result(document, _tables(fit, ledger))
    output.remark(f"run {run} stored in {path}")
    return fit


def _tables(fit: Fit, ledger: Ledger) -> Iterator[Table]:
    """All tables of a fit, made only where they are shown."""
    yield from fit_tables(fit)
    yield from ledger_tables(ledger)
