"""`dunhamfit diagnose ARCHIVE`: what a referee would ask of the residuals, the sources and the bands of a run."""

from __future__ import annotations

from pathlib import Path

import click

from dunhamfit.cli.archived import archive_argument, load_run, run_option
from dunhamfit.cli.output import Output, json_option, quiet_option
from dunhamfit.inference.influence import influence
from dunhamfit.inference.resample import bootstrap, leave_one_out
from dunhamfit.inference.systematics import find_systematics
from dunhamfit.show.diagnostics_report import (
    bootstrap_table,
    diagnostics_tables,
    dropped_document,
    influence_document,
    systematics_document,
)


@click.command()
@archive_argument
@run_option
@click.option("--bootstrap", "resamples", type=click.IntRange(min=2), metavar="N", help="Add N bootstrap resamples.")
@click.option("--by", type=click.Choice(("line", "band")), default="line", show_default=True, help="What is resampled.")
@click.option("--seed", type=click.IntRange(min=0), default=1, show_default=True, help="Seed of the bootstrap.")
@json_option
@quiet_option
def command(
    archive: Path, run: int | None, resamples: int | None, by: str, seed: int, as_json: bool, quiet: bool
) -> None:
    """Test the residuals of a run of ARCHIVE for systematic parts, and fit without each source and band in turn."""
    output = Output(as_json=as_json, quiet=quiet)
    number, fit = load_run(archive, run)
    tables = diagnostics_tables(fit)
    document: dict[str, object] = {
        "run": number,
        "systematics": systematics_document(find_systematics(fit)),
        "influence": influence_document(fit, influence(fit)),
        "left_out": dropped_document(fit, leave_one_out(fit, "band")),
    }
    if resamples is not None:
        with output.progress("resamples") as report:
            found = bootstrap(fit, by=by, resamples=resamples, seed=seed, progress=report)
        tables = (*tables, bootstrap_table(fit, found))
        document["bootstrap"] = {
            "by": by,
            "seed": seed,
            "sd": dict(zip((item.name for item in fit.constants), found.sigmas[: len(fit.constants)], strict=True)),
        }
    output.result(document, tables)
