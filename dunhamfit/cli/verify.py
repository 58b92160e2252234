"""`dunhamfit verify ARCHIVE`: every run repeated from what the archive holds."""

from __future__ import annotations

from pathlib import Path

import click

from dunhamfit.archive.lineage import TOLERANCE, verify
from dunhamfit.archive.store import open_archive
from dunhamfit.cli.output import Output, file_option, json_option, quiet_option
from dunhamfit.errors import ArchiveProblem
from dunhamfit.job.again import repeat_run
from dunhamfit.show.history_report import verify_document, verify_table


@click.command()
@click.argument("archive", type=click.Path(dir_okay=False, path_type=Path))
@json_option
@file_option
@quiet_option
def command(archive: Path, as_json: bool, path: Path | None, quiet: bool) -> int:
    """Fit every run of ARCHIVE again from the archive alone and say whether it agrees; exit code 6 if one does not."""
    with open_archive(archive) as store:
        checks = verify(store, refit=repeat_run)
    document = verify_document(checks)
    records = [
        {name: "; ".join(value) if isinstance(value, list) else value for name, value in item.items()}
        for item in document["runs"]
    ]
    output = Output(as_json=as_json, quiet=quiet, path=path)
    output.result(document, [verify_table(checks, archive=archive.name, tolerance=TOLERANCE)], records=records)
    if document["agrees"]:
        return 0
    wrong = [str(item.run) for item in checks if not item.agrees]
    output.warn(f"{archive}: run {', '.join(wrong)} does not agree with what the archive holds")
    return ArchiveProblem.exit_code
