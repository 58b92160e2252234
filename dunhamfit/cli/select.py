"""`dunhamfit select JOB`: which terms the lines speak for."""

from __future__ import annotations

from pathlib import Path

import click

from dunhamfit.cli.output import Output, file_option, json_option, quiet_option
from dunhamfit.errors import UsageError
from dunhamfit.inference.widest import GENEROUS
from dunhamfit.job.run import read_job_lines, select_job
from dunhamfit.job.tables import read_job
from dunhamfit.lines.faults import raise_faults
from dunhamfit.show.selection_report import selection_document, selection_records, selection_tables


@click.command()
@click.argument("job", type=click.Path(path_type=Path))
@click.option(
    "--orders",
    metavar="K0,K1,...",
    help="Widest set to consider: the highest k for l = 0, 1, 2, ...; by default "
    f"{','.join(map(str, GENEROUS))} as far as the lines reach.",
)
@click.option("--all", "everything", is_flag=True, help="Show sets of hopeless BIC too.")
@json_option
@file_option
@quiet_option
def command(
    job: Path, orders: str | None, everything: bool, as_json: bool, path: Path | None, quiet: bool
) -> None:
    """Compare candidate sets of terms on the lines of JOB, whatever terms it asks for; nothing is stored."""
    output = Output(as_json=as_json, quiet=quiet, path=path)
    wanted, widest = read_job(job), GENEROUS if orders is None else _parse_orders(orders)
    reading = read_job_lines(wanted)
    for notice in reading.notices:
        output.warn(notice)
    raise_faults(reading.faults, rows_fine=sum(len(item.lines) for item in reading.readings))
    with output.progress("sets of terms") as report:
        selection = select_job(wanted, reading.lines, widest=widest, progress=report)
    output.result(
        selection_document(selection),
        selection_tables(selection, everything=everything),
        records=selection_records(selection),
    )


def _parse_orders(text: str) -> tuple[int, ...]:
    """Highest k for l = 0, 1, 2, ... from `5,4,3`."""
    parts = [part.strip() for part in text.split(",")]
    if not all(part.isascii() and part.isdigit() and len(part) < 3 for part in parts):
        raise UsageError(
            f"--orders takes the highest k for l = 0, 1, 2, ..., separated by commas, such as 5,4,3,2,1 (got {text!r})"
        )
    return tuple(map(int, parts))
