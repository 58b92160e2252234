"""`dunhamfit demo [DIR]`: the invented example, checked, fitted and compared with its stated truth."""

from __future__ import annotations

import json
import shutil
from importlib.resources import as_file, files
from pathlib import Path

import click

from dunhamfit.cli.check import run_check
from dunhamfit.cli.fit import run_fit
from dunhamfit.cli.output import Output, quiet_option
from dunhamfit.errors import UsageError
from dunhamfit.fit.record import Fit
from dunhamfit.job.tables import read_job
from dunhamfit.show.numbers import format_value
from dunhamfit.show.tables import Column, Table

_JOB = "sis.toml"
_TRUTH = "truth.json"


@click.command()
@click.argument("folder", metavar="[DIR]", default="dunhamfit-demo", type=click.Path(path_type=Path))
@quiet_option
def command(folder: Path, quiet: bool) -> None:
    """Write an invented example job into DIR, check it, fit it, and compare with the truth behind it.

    DIR is dunhamfit-demo if left out. All data of the example are invented.
    """
    output = Output(quiet=quiet)
    _write_example(folder)
    output.remark(f"wrote the example into {folder}; all of its data are invented")
    job = read_job(folder / _JOB)
    run_check(job, output)
    fit = run_fit(job, None, output)
    truth = json.loads((folder / _TRUTH).read_text(encoding="utf-8"))
    table = truth_table(fit, truth)
    output.result({}, [table])
    output.remark(f"next: dunhamfit fit {folder / _JOB}; dunhamfit history {job.archive}")


def _write_example(folder: Path) -> None:
    """Copy the example; files that are there already and differ are never written over."""
    with as_file(files("dunhamfit") / "examples") as home:
        wanted = [*sorted((home / "campaign").iterdir()), *sorted((home / "next_band").iterdir())]
        for source in wanted:
            target = folder / source.name
            if target.exists() and target.read_bytes() != source.read_bytes():
                raise UsageError(f"{target} exists and is not the example's; name another folder")
        folder.mkdir(parents=True, exist_ok=True)
        for source in wanted:
            shutil.copyfile(source, folder / source.name)


def truth_table(fit: Fit, truth: dict) -> Table:
    """Fitted constants beside the invented truth, and their distance in sigma."""
    rows = []
    for index, item in enumerate(fit.constants):
        value, sigma = float(fit.values[index]), float(fit.sigmas[index])
        known = truth["breakdown"][item.atom][f"{item.k}{item.l}"] if item.atom else truth["terms"][item.name]
        rows.append(
            (item.name, format_value(value, sigma), f"{known:.10g}", f"{(value - known) / sigma:+.2f}")
        )
    columns = (
        Column("constant"),
        Column("value(sigma)", "decimal", "cm-1"),
        Column("truth", "decimal", "cm-1"),
        Column("distance", "right", "sigma"),
    )
    return Table("Distance from the invented truth", columns, tuple(rows))
