"""`dunhamfit export ARCHIVE --to DIR`: constants, covariance and lines for other programs and for the paper."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from pathlib import Path

import click
import numpy as np
from scipy.interpolate import CubicSpline

from dunhamfit.archive.runs import StoredRun
from dunhamfit.archive.store import open_archive
from dunhamfit.cli.archived import archive_argument, run_option
from dunhamfit.cli.output import Output, json_text, parts_text, quiet_option
from dunhamfit.errors import DunhamfitError, UsageError
from dunhamfit.fit.record import Fit
from dunhamfit.inference.posterior import Posterior
from dunhamfit.inference.shifts import parameter_shifts
from dunhamfit.inference.storing import unpack
from dunhamfit.results.isotopologues import own_constants
from dunhamfit.results.levels import energy_levels
from dunhamfit.results.turning_points import molecular_curve
from dunhamfit.show.documents import fit_document
from dunhamfit.show.figures import (
    corner_figure,
    draw_potential,
    draw_prediction_sigma,
    draw_shifts,
    fit_figures,
    new_figure,
    save,
)
from dunhamfit.show.fit_report import bands_table, constants_table, fit_tables
from dunhamfit.show.hand_over import constants_csv, covariance_csv, job_text, line_files
from dunhamfit.show.latex import to_latex
from dunhamfit.show.machine_readable import line_table
from dunhamfit.show.publication import bibtex, isotopologue_table, methods_paragraph
from dunhamfit.show.rounding import rounded_correlation
from dunhamfit.show.tables import records_to_csv

# A corner plot of more quantities than this cannot be read.
_CORNER_AT_MOST = 8


@click.command()
@archive_argument
@click.option("--to", "folder", required=True, metavar="DIR", type=click.Path(file_okay=False, path_type=Path))
@run_option
@click.option("--figures/--no-figures", default=True, show_default=True, help="Draw the figures, as PDF and PNG.")
@click.option("--corner", metavar="NAMES", help="Quantities of the corner plot, such as Y10,Y01; by default the first.")
@click.option("--force", is_flag=True, help="Write over files that are there and differ.")
@quiet_option
def command(
    archive: Path, folder: Path, run: int | None, figures: bool, corner: str | None, force: bool, quiet: bool
) -> None:
    """Write a run of ARCHIVE into DIR: constants, covariance, lines with residuals, and a job that fits them.

    With them go LaTeX tables, a line table with a description of every column, a methods paragraph,
    references, and figures.
    """
    output = Output(quiet=quiet)
    with open_archive(archive) as store:
        number = store.latest_number() if run is None else run
        stored = store.stored(number) if number is not None else store.stored(1)
        parent = store.load(stored.parent) if stored.parent is not None else None
        sampled = next(item.posterior for item in store.runs() if item.run == stored.run)
        posterior = unpack(store.posterior(stored.run)) if sampled else None
    texts = {**number_files(stored), **paper_files(stored.fit, stored.title, sampled=sampled, warn=output.warn)}
    write_files(folder, texts, force=force)
    if figures:
        write_figures(folder / "figures", stored.fit, parent, posterior, corner=corner, warn=output.warn)
    output.remark(f"wrote run {stored.run} into {folder}; 'dunhamfit fit {folder}/job.toml' repeats it")


def number_files(stored: StoredRun) -> dict[str, str]:
    """Files for other programs, numbers at full precision, by name."""
    fit = stored.fit
    document = fit_document(fit, run=stored.run, parent=stored.parent, notices=stored.notices)
    return {
        "constants.json": json_text(document),
        "constants.csv": constants_csv(fit),
        "covariance.csv": covariance_csv(fit),
        "job.toml": job_text(fit, title=stored.title, extra_model=stored.origin.get("model")),
        **line_files(fit),
    }


def paper_files(fit: Fit, title: str, *, sampled: bool, warn: Callable[[str], None]) -> dict[str, str]:
    """Files for a paper, by name."""
    names = [fit.lines.isotopologues[code] for code in np.unique(fit.groups.isotopologue)]
    reference = fit.model.reference.name
    constants = {name: _own(fit, name) for name in [reference, *(n for n in names if n != reference)]}
    files = {
        "tables.txt": parts_text(fit_tables(fit), width=100, colour=False),
        "constants.tex": to_latex(constants_table(fit)),
        "isotopologues.tex": to_latex(isotopologue_table(fit, constants)),
        "bands.tex": to_latex(bands_table(fit)),
        "lines.mrt": line_table(fit, title=title),
        "methods.txt": methods_paragraph(fit),
        "references.bib": bibtex(fit, sampled=sampled),
    }
    try:
        correlation = rounded_correlation(fit)
    except DunhamfitError as error:
        warn(f"no rounded correlation matrix is written: {error}")
    else:
        files["correlation.csv"] = _correlation_csv(correlation.names, correlation.matrix, correlation.decimals)
    return files


def write_figures(
    folder: Path, fit: Fit, parent: Fit | None, posterior: Posterior | None, *, corner: str | None, warn
) -> None:
    """Draw every figure that the run has something for."""
    folder.mkdir(parents=True, exist_ok=True)
    drawings = dict(fit_figures(fit))
    curves, limits = _prediction_sigma(fit)
    drawings["prediction_sigma"] = lambda axes: draw_prediction_sigma(axes, curves, limits)
    if parent is not None:
        shifts = [item for item in parameter_shifts(parent, fit) if np.isfinite(item.in_sigma)]
        if shifts:
            names, sizes = [item.name for item in shifts], np.array([item.in_sigma for item in shifts])
            drawings["shifts"] = lambda axes: draw_shifts(axes, names, sizes)
    try:
        curve = molecular_curve(fit)
    except DunhamfitError as error:
        warn(f"no potential curve is drawn: {error}")
    else:
        points = list(zip(curve.points.r_min, curve.points.r_max, curve.points.energy, strict=True))
        r = np.linspace(curve.grid.r[0], curve.grid.r[-1], 2000)
        energy = CubicSpline(curve.grid.r, curve.grid.energy)(r)
        drawings["potential"] = lambda axes: draw_potential(axes, r, energy, points)
    for name, draw in drawings.items():
        figure, axes = new_figure()
        draw(axes)
        save(figure, folder / name)
    if posterior is not None:
        for name, draws in _corner_draws(posterior, corner).items():
            units = {item.name: item.unit for item in posterior.quantities}
            save(corner_figure(draws, units), folder / name)


def write_files(folder: Path, files: Mapping[str, str], *, force: bool) -> None:
    """Write texts into a folder; without `force` a file that is there and differs is never touched."""
    if not force:
        for name, text in files.items():
            target = folder / name
            if target.exists() and target.read_text(encoding="utf-8") != text:
                raise UsageError(
                    f"{target} is there and differs; name another folder, or give --force to write over it"
                )
    folder.mkdir(parents=True, exist_ok=True)
    for name, text in files.items():
        (folder / name).write_text(text, encoding="utf-8", newline="\n")


def _own(fit: Fit, isotopologue: str) -> list[tuple[str, float, float]]:
    own = own_constants(fit, isotopologue)
    return [
        (term.name, float(value), float(sigma))
        for term, value, sigma in zip(own.terms, own.values, own.sigmas, strict=True)
    ]


def _prediction_sigma(fit: Fit) -> tuple[dict[str, tuple[np.ndarray, np.ndarray]], dict[str, int]]:
    """Sigma of the levels of each observed v up to half as high again in J as any line, and J observed."""
    lines, used = fit.lines, fit.lines.used
    own = used & (np.array(lines.isotopologues)[lines.isotopologue] == fit.model.reference.name)
    chosen = own if own.any() else used
    top = int(lines.j_upper[chosen].max())
    v_top = int(lines.v_upper[chosen].max())
    levels = energy_levels(fit, j_max=top + top // 2, v_max=v_top)
    curves, limits = {}, {}
    for v in range(v_top + 1):
        at = (levels.v == v) & (levels.sigma > 0)  # energies count from v = 0, J = 0, which is exact
        reached = np.concatenate(
            [lines.j_upper[chosen & (lines.v_upper == v)], lines.j_lower[chosen & (lines.v_lower == v)]]
        )
        curves[f"v = {v}"] = (levels.j[at], levels.sigma[at])
        limits[f"v = {v}"] = int(reached.max(initial=-1))
    return curves, limits


def _corner_draws(posterior: Posterior, corner: str | None) -> dict[str, dict[str, np.ndarray]]:
    if corner:
        names = [name.strip() for name in corner.split(",")]
        for name in names:
            posterior.index(name)
    else:
        names = [item.name for item in posterior.quantities if item.kind in ("term", "breakdown")][:_CORNER_AT_MOST]
    factors = [item.name for item in posterior.quantities if item.kind == "noise factor"][:_CORNER_AT_MOST]
    wanted = {"corner": names, "corner_noise": factors}
    return {stem: {name: posterior.draws[name] for name in chosen} for stem, chosen in wanted.items() if chosen}


def _correlation_csv(names, matrix: np.ndarray, decimals: int) -> str:
    return records_to_csv(
        [
            {"constant": name, **{other: f"{entry:.{decimals}f}" for other, entry in zip(names, row, strict=True)}}
            for name, row in zip(names, matrix, strict=True)
        ]
    )
