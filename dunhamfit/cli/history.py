"""`dunhamfit history ARCHIVE`: the runs, what each was made after and what it added."""

from __future__ import annotations

from pathlib import Path

import click

from dunhamfit.archive.store import open_archive
from dunhamfit.cli.output import Output, file_option, json_option, quiet_option
from dunhamfit.show.history_report import history_document, history_table


@click.command()
@click.argument("archive", type=click.Path(dir_okay=False, path_type=Path))
@json_option
@file_option
@quiet_option
def command(archive: Path, as_json: bool, path: Path | None, quiet: bool) -> None:
    """List the runs of ARCHIVE, oldest first, with what each one added."""
    with open_archive(archive) as store:
        runs = store.runs()
    document = history_document(runs)
    records = [
        {name: " ".join(value) if isinstance(value, list) else value for name, value in item.items()}
        for item in document["runs"]
    ]
    output = Output(as_json=as_json, quiet=quiet, path=path)
    output.result(document, [history_table(runs, archive=archive.name)], records=records)
