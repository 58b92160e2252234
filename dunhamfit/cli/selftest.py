"""`dunhamfit selftest ARCHIVE`: do the error bars of your own line list cover?"""

from __future__ import annotations

import os
import secrets
from collections.abc import Iterator
from concurrent.futures import Executor, ProcessPoolExecutor
from contextlib import contextmanager
from multiprocessing import get_context
from pathlib import Path

import click

from dunhamfit.archive.store import open_archive
from dunhamfit.cli.output import Output, json_option, quiet_option
from dunhamfit.inference.simulate import coverage
from dunhamfit.show.diagnostics_report import coverage_document, coverage_tables


@click.command()
@click.argument("archive", type=click.Path(path_type=Path))
@click.option("--run", type=click.IntRange(min=1), help="Run to test; by default the latest one.")
@click.option(
    "--sets", type=click.IntRange(min=1), default=400, show_default=True, help="Line lists to simulate and fit."
)
@click.option("--seed", type=click.IntRange(min=0), help="Seed of the simulation; by default a new one, which is said.")
@click.option(
    "--workers", type=click.IntRange(min=1), default=1, show_default=True, help="Processes that share the work."
)
@json_option
@quiet_option
def command(
    archive: Path, run: int | None, sets: int, seed: int | None, workers: int, as_json: bool, quiet: bool
) -> None:
    """Simulate the lines of a run of ARCHIVE many times, fit them again, and count how often the error bars cover."""
    output = Output(as_json=as_json, quiet=quiet)
    with open_archive(archive) as store:
        fit = store.latest() if run is None else store.load(run)
    seed = secrets.randbelow(2**32) if seed is None else seed
    with _processes(workers) as executor, output.progress("simulated line lists") as report:
        found = coverage(fit, sets=sets, seed=seed, executor=executor, progress=report)
    output.result(coverage_document(found), coverage_tables(found))


@contextmanager
def _processes(workers: int) -> Iterator[Executor | None]:
    """Processes that share the work; None where one is enough."""
    if workers == 1:
        yield None
        return
    # One process for each processor is all the parallel work there is: threads of the linear algebra under it
    # would only wait for each other. New processes read this when they start.
    for name in ("OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "OMP_NUM_THREADS"):
        os.environ.setdefault(name, "1")
    with ProcessPoolExecutor(workers, mp_context=get_context("spawn")) as pool:
        yield pool
