"""`dunhamfit check JOB`: every fault in one pass, then the checks that need no model."""

from __future__ import annotations

from dataclasses import asdict
from pathlib import Path

import click

from dunhamfit.cli.output import Output, json_option, quiet_option
from dunhamfit.errors import InputFaults
from dunhamfit.job.run import JobReading, read_job_lines
from dunhamfit.job.tables import Job, read_job
from dunhamfit.lines.closure import Closure, check_closure
from dunhamfit.lines.faults import raise_faults
from dunhamfit.lines.straight_line import look_at_bands
from dunhamfit.show.check_report import looks_table, readings_table, suspects_table


@click.command()
@click.argument("job", type=click.Path(path_type=Path))
@json_option
@quiet_option
def command(job: Path, as_json: bool, quiet: bool) -> int:
    """Read every source of JOB, report every fault in one pass, then check the lines against each other."""
    return run_check(read_job(job), Output(as_json=as_json, quiet=quiet))


def run_check(job: Job, output: Output) -> int:
    """Check a job and hand over the result; the exit code is 3 where there are faults."""
    reading = read_job_lines(job)
    for notice in reading.notices:
        output.warn(notice)
    names = [request.name for request in job.sources]
    if reading.lines is None:
        output.result(_document(names, reading, None), [readings_table(names, reading.readings)])
        raise_faults(reading.faults, rows_fine=sum(len(item.lines) for item in reading.readings))
        return InputFaults.exit_code
    closure = check_closure(reading.lines)
    parts = [
        readings_table(names, reading.readings),
        looks_table(look_at_bands(reading.lines)),
        suspects_table(closure),
    ]
    output.result(_document(names, reading, closure), parts)
    return 0


def _document(names: list[str], reading: JobReading, closure: Closure | None) -> dict[str, object]:
    suspects = closure.suspects if closure else ()
    return {
        "sources": [
            {"name": name, "lines": item.rows, "used": item.used, "rejected": item.rejected}
            for name, item in zip(names, reading.readings, strict=True)
        ],
        "faults": [asdict(fault) for fault in reading.faults],
        "suspects": [
            {
                "isotopologue": item.isotopologue,
                "band": item.band,
                "line": item.line,
                "size": item.size,
                "sigma": item.sigma,
                "check": item.check,
                "place": item.place,
                "rivals": list(item.rivals),
            }
            for item in suspects
        ],
    }
