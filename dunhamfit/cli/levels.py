"""`dunhamfit levels ARCHIVE`: E(v, J) with uncertainties, for a database."""

from __future__ import annotations

from pathlib import Path

import click

from dunhamfit.cli.archived import (
    archive_argument,
    isotopologue_option,
    load_run,
    run_option,
    spread_option,
)
from dunhamfit.cli.output import Output, file_option, json_option, quiet_option
from dunhamfit.results.levels import J_LIMIT, energy_levels, validity
from dunhamfit.results.near_equal import near_equal_sets
from dunhamfit.results.observed import ObservedLevels
from dunhamfit.show.predict_report import levels_document, levels_table, validity_table
from dunhamfit.units import UNITS


@click.command()
@archive_argument
@click.option("--vmax", "v_max", type=int, help="Highest v; by default the highest that a line reaches.")
@click.option("--jmax", "j_max", type=int, default=30, show_default=True, help="Highest J.")
@isotopologue_option
@click.option("--unit", type=click.Choice(UNITS[:-1]), default="cm-1", show_default=True)
@spread_option
@click.option("--tolerance", type=float, metavar="CM-1", help="Also show up to which J levels are known to this sigma.")
@click.option("--covariance", is_flag=True, help="Add the covariance of the levels, in cm-2, to the JSON object.")
@run_option
@json_option
@file_option
@quiet_option
def command(
    archive: Path,
    v_max: int | None,
    j_max: int,
    isotopologue: str | None,
    unit: str,
    model_spread: bool,
    tolerance: float | None,
    covariance: bool,
    run: int | None,
    as_json: bool,
    path: Path | None,
    quiet: bool,
) -> None:
    """List energy levels from a run of ARCHIVE, above v = 0, J = 0."""
    output = Output(as_json=as_json, quiet=quiet, path=path)
    number, fit = load_run(archive, run)
    selection = near_equal_sets(fit) if model_spread else None
    chosen = {"v_max": v_max, "isotopologue": isotopologue, "selection": selection}
    found = energy_levels(fit, j_max=j_max, **chosen)
    records = found.records(unit)
    parts, limits = [levels_table(records, fit)], ()
    if tolerance is not None:
        limits = validity(energy_levels(fit, j_max=max(J_LIMIT, j_max), **chosen), tolerance, ObservedLevels(fit))
        parts.append(validity_table(limits, isotopologue=found.isotopologue, tolerance=tolerance))
    matrix = found.parts.covariance if covariance else None
    document = levels_document(records, run=number, validity=limits, covariance=matrix)
    output.result(document, parts, records=records)
