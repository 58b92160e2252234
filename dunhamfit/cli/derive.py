"""`dunhamfit derive ARCHIVE`: omega_e, B_e, r_e and their kin, with uncertainties."""

from __future__ import annotations

from pathlib import Path

import click

from dunhamfit.cli.archived import archive_argument, isotopologue_option, load_run, run_option
from dunhamfit.cli.output import Output, file_option, json_option, quiet_option
from dunhamfit.results.derived import derive
from dunhamfit.results.isotopologues import mass_independent, own_constants
from dunhamfit.results.turning_points import molecular_curve
from dunhamfit.results.vibrational import vibrational_constants
from dunhamfit.show.curve_report import curve_document, curve_table
from dunhamfit.show.derive_report import derive_document, derive_records, derive_tables


@click.command()
@archive_argument
@isotopologue_option
@click.option("--vmax", "v_max", type=int, help="Highest v of the levels; by default the highest that a line reaches.")
@click.option("--turning-points", is_flag=True, help="Also the turning points, and the potential through them.")
@run_option
@json_option
@file_option
@quiet_option
def command(
    archive: Path,
    isotopologue: str | None,
    v_max: int | None,
    turning_points: bool,
    run: int | None,
    as_json: bool,
    path: Path | None,
    quiet: bool,
) -> None:
    """Derive constants of one isotopologue from a run of ARCHIVE, in cm-1 and MHz."""
    output = Output(as_json=as_json, quiet=quiet, path=path)
    number, fit = load_run(archive, run)
    derived, own = derive(fit, isotopologue), own_constants(fit, isotopologue)
    levels = vibrational_constants(fit, isotopologue, v_max=v_max)
    masses = mass_independent(fit) if fit.model.breakdown else None
    document = derive_document(derived, own, levels, masses, run=number)
    tables = derive_tables(derived, own, levels, masses, fit)
    if turning_points:
        curve = molecular_curve(fit, isotopologue, v_max=v_max)
        document = {**document, **curve_document(curve)}
        tables.append(curve_table(curve))
    output.result(document, tables, records=derive_records(document))
