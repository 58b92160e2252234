"""`dunhamfit compare ARCHIVE [OLD NEW]`: constant by constant and line by line."""

from __future__ import annotations

import json
from pathlib import Path

import click

from dunhamfit.archive.store import Archive, open_archive
from dunhamfit.cli.archived import archive_argument
from dunhamfit.cli.output import Output, file_option, json_option, quiet_option
from dunhamfit.errors import UsageError
from dunhamfit.results.compare import Comparison, compare, relation_of
from dunhamfit.results.given import constants_of_document, constants_of_fit
from dunhamfit.show.compare_report import compare_document, compare_parts


@click.command()
@archive_argument
@click.argument("runs", type=int, nargs=-1, metavar="[OLD NEW]")
@click.option(
    "--constants",
    "given",
    metavar="FILE",
    type=click.Path(dir_okay=False, path_type=Path),
    help="Compare a run with constants in a JSON file, such as 'fit --json' prints.",
)
@json_option
@file_option
@quiet_option
def command(
    archive: Path, runs: tuple[int, ...], given: Path | None, as_json: bool, path: Path | None, quiet: bool
) -> None:
    """Compare two runs of ARCHIVE, by default the last one with the one it was made after.

    With --constants, compare one run (by default the last) with constants in a file: {"constants": {"Y10": 2170.0}},
    or a list of {"name", "value", "sigma", "unit"}; "isotopologue" beside "constants" says whose they are.
    """
    output = Output(as_json=as_json, quiet=quiet, path=path)
    with open_archive(archive) as store:
        found = _with_file(store, runs, given) if given else _two_runs(store, runs)
    document = compare_document(found)
    output.result(document, compare_parts(found), records=document["constants"])


def _two_runs(store: Archive, runs: tuple[int, ...]) -> Comparison:
    if len(runs) not in (0, 2):
        raise UsageError(f"give two runs, the old one and the new one, or none (got {len(runs)})")
    old_number, new_number = runs or _last_two(store)
    old, new = store.load(old_number), store.load(new_number)
    reference = old.model.reference.name
    return compare(
        constants_of_fit(old, f"run {old_number}"),
        constants_of_fit(new, f"run {new_number}", reference),
        new.lines,
        relation=relation_of(old, new),
    )


def _last_two(store: Archive) -> tuple[int, int]:
    summaries = store.runs()
    if len(summaries) < 2:
        raise UsageError("there are no two runs to compare; --constants compares one with a file")
    last = summaries[-1]
    return (summaries[-2].run if last.parent is None else last.parent), last.run


def _with_file(store: Archive, runs: tuple[int, ...], path: Path) -> Comparison:
    if len(runs) > 1:
        raise UsageError(f"give one run to compare with {path}, or none for the last one (got {len(runs)})")
    number = runs[0] if runs else store.latest_number()
    fit = store.latest() if number is None else store.load(number)
    try:
        document = json.loads(path.read_text(encoding="utf-8"))
    except ValueError as problem:  # JSON and UTF-8 alike
        raise UsageError(f"{path} is not JSON: {problem}") from None
    given = constants_of_document(document, str(path), fit)
    own = constants_of_fit(fit, f"run {number}", given.model.reference.name)
    return compare(given, own, fit.lines)
