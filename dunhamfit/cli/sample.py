"""`dunhamfit sample ARCHIVE`: the posterior of a run, stored with it."""

from __future__ import annotations

from pathlib import Path

import click

from dunhamfit.archive.side_file import SideFile
from dunhamfit.archive.store import Archive, open_archive
from dunhamfit.cli.archived import archive_argument, run_option
from dunhamfit.cli.output import Output, json_option, quiet_option
from dunhamfit.errors import NotConverged, UsageError
from dunhamfit.inference.posterior import Posterior, join
from dunhamfit.inference.sampling import ERROR_MODELS, sample
from dunhamfit.inference.storing import ARRAY_UNITS, pack, unpack
from dunhamfit.show.posterior_report import posterior_document, posterior_tables

_INTERRUPTED = 130


@click.command()
@archive_argument
@run_option
@click.option("--total", type=click.IntRange(min=1), metavar="N", help="Sample until there are N draws in all.")
@click.option("--more", type=click.IntRange(min=1), metavar="N", help="Add N draws to those that are there.")
@click.option("--seed", type=click.IntRange(min=0), help="Seed of a new chain; by default drawn from the system.")
@click.option(
    "--model", type=click.Choice(ERROR_MODELS), default="gaussian", show_default=True, help="Errors of lines."
)
@click.option("--fresh", is_flag=True, help="Begin again, in the place of the chain that is there.")
@click.option("--force", is_flag=True, help="Give quantiles of a chain that is too short, stamped as such.")
@json_option
@quiet_option
def command(
    archive: Path,
    run: int | None,
    total: int | None,
    more: int | None,
    seed: int | None,
    model: str,
    fresh: bool,
    force: bool,
    as_json: bool,
    quiet: bool,
) -> int:
    """Sample the posterior of a run of ARCHIVE and store it there.

    Without --total or --more the chain goes on until every constant has 1,000 effective draws. A chain
    that is there, or that was interrupted, is continued; the result is that of one uninterrupted chain.
    """
    output = Output(as_json=as_json, quiet=quiet)
    if total is not None and more is not None:
        raise UsageError("--total N and --more N are different things; give one of them")
    with open_archive(archive) as store:
        number = store.latest_number() if run is None else run
        fit = store.latest() if number is None else store.load(number)
        stored = [] if fresh else _stored(store, number)
    side = SideFile(archive, number)
    if fresh:
        side.remove()
    start = _gone_on(stored, side)
    if start is not None and seed is not None and seed != start.seed:
        raise UsageError(
            f"the chain that is there has seed {start.seed}; leave out --seed, or begin again with --fresh"
        )
    if start is None and more is not None:
        total, more = more, None  # nothing is there yet, so that N more are N in all
    with output.progress("draws") as report:
        posterior = sample(
            fit,
            seed=seed if start is None else None,
            total=total,
            more=more,
            start=start,
            model=model,
            force=force,
            progress=report,
            on_block=_Keeper(side, 0 if start is None else len(start.chain)),
        )
    with open_archive(archive, mode="a") as store:
        store.save_posterior(number, pack(posterior), units=ARRAY_UNITS)
    side.remove()
    output.result(posterior_document(posterior), posterior_tables(posterior))
    output.remark(f"{posterior.total} draws stored with run {number} in {archive}")
    if posterior.interrupted:
        output.warn("interrupted; the same command goes on from here")
        return _INTERRUPTED
    if not posterior.converged:
        output.warn(posterior.stamp)
        return NotConverged.exit_code
    return 0


def _stored(store: Archive, number: int) -> list[Posterior]:
    """The posterior that the archive holds of a run, if any."""
    summary = next(item for item in store.runs() if item.run == number)
    return [unpack(store.posterior(number))] if summary.posterior else []


class _Keeper:
    """Puts every finished block into the side file, with the step at which it begins."""

    def __init__(self, side: SideFile, first_step: int):
        self.side = side
        self.first_step = first_step

    def __call__(self, piece: Posterior) -> None:
        self.side.add({**pack(piece), "first_step": self.first_step})
        self.first_step += len(piece.chain)


def _gone_on(stored: list[Posterior], side: SideFile) -> Posterior | None:
    """The stored chain with the blocks that go on from it.

    A process that was killed after it had stored its chain leaves blocks that the chain holds already.
    """
    pieces = list(stored)
    for block in side.blocks():
        if int(block["first_step"]) == sum(len(piece.chain) for piece in pieces):
            pieces.append(unpack(block))
    return join(pieces) if pieces else None
