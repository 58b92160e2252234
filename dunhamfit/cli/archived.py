"""What the commands share that start from a run of an archive."""

from __future__ import annotations

import re
from pathlib import Path

import click

from dunhamfit.archive.store import open_archive
from dunhamfit.errors import UsageError
from dunhamfit.fit.record import Fit
from dunhamfit.units import UNITS

archive_argument = click.argument("archive", type=click.Path(dir_okay=False, path_type=Path))
run_option = click.option("--run", type=int, help="Number of the run; by default the last one.")
isotopologue_option = click.option(
    "--isotopologue",
    metavar="NAME",
    help="Any of the molecule, measured or not, such as 29Si34S; by default the reference.",
)
unit_option = click.option("--unit", type=click.Choice(UNITS), default="cm-1", show_default=True)
spread_option = click.option(
    "--model-spread",
    is_flag=True,
    help="Compare sets of terms on the lines of the run, and add their spread to sigma.",
)

_BAND = re.compile(r"(\d+)-(\d+)", re.ASCII)


def load_run(archive: Path, run: int | None) -> tuple[int, Fit]:
    """Number and fit of a run; the last one if `run` is None."""
    with open_archive(archive) as store:
        number = store.latest_number() if run is None else run
        return (number, store.load(number)) if number is not None else (0, store.latest())


def parse_band(text: str) -> tuple[int, int]:
    """v' and v'' of a band such as `4-0`."""
    found = _BAND.fullmatch(text.strip())
    if not found:
        raise UsageError(f"a band is written as v'-v'', such as 4-0 (got {text!r})")
    return int(found[1]), int(found[2])
