"""`dunhamfit predict ARCHIVE`: lines of any band and isotopologue, with uncertainties."""

from __future__ import annotations

from pathlib import Path

import click

from dunhamfit.cli.archived import (
    archive_argument,
    isotopologue_option,
    load_run,
    parse_band,
    run_option,
    spread_option,
    unit_option,
)
from dunhamfit.cli.output import Output, file_option, json_option, quiet_option
from dunhamfit.results.levels import J_LIMIT, energy_levels, validity
from dunhamfit.results.near_equal import near_equal_sets
from dunhamfit.results.observed import ObservedLevels
from dunhamfit.results.predict import predict
from dunhamfit.show.predict_report import predict_document, predict_table, validity_table


@click.command()
@archive_argument
@click.option("--band", "bands", multiple=True, required=True, metavar="V-V", help="Such as 4-0; may be repeated.")
@click.option("--jmax", "j_max", type=int, default=30, show_default=True, help="Highest J of the lower level.")
@isotopologue_option
@unit_option
@spread_option
@click.option("--tolerance", type=float, metavar="CM-1", help="Also show up to which J levels are known to this sigma.")
@run_option
@json_option
@file_option
@quiet_option
def command(
    archive: Path,
    bands: tuple[str, ...],
    j_max: int,
    isotopologue: str | None,
    unit: str,
    model_spread: bool,
    tolerance: float | None,
    run: int | None,
    as_json: bool,
    path: Path | None,
    quiet: bool,
) -> None:
    """Predict P and R lines from a run of ARCHIVE, with sigma from the full covariance."""
    output = Output(as_json=as_json, quiet=quiet, path=path)
    wanted = [parse_band(text) for text in bands]
    number, fit = load_run(archive, run)
    selection = near_equal_sets(fit) if model_spread else None
    records = []
    for v_upper, v_lower in wanted:
        found = predict(
            fit, v_upper=v_upper, v_lower=v_lower, j_max=j_max, isotopologue=isotopologue, selection=selection
        )
        records += found.records(unit)
    parts, limits = [predict_table(records, fit)], ()
    if tolerance is not None:
        v_max = max(v_upper for v_upper, _ in wanted)
        levels = energy_levels(
            fit, v_max=v_max, j_max=max(J_LIMIT, j_max + 1), isotopologue=isotopologue, selection=selection
        )
        limits = validity(levels, tolerance, ObservedLevels(fit))
        parts.append(validity_table(limits, isotopologue=levels.isotopologue, tolerance=tolerance))
    output.result(predict_document(records, run=number, validity=limits), parts, records=records)
