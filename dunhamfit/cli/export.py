"""`dunhamfit export ARCHIVE --to DIR`: constants, covariance and lines for other programs and for the paper."""

from __future__ import annotations

from pathlib import Path

import click

from dunhamfit.archive.store import open_archive
from dunhamfit.cli.output import Output, json_text, parts_text, quiet_option
from dunhamfit.errors import UsageError
from dunhamfit.show.documents import fit_document
from dunhamfit.show.fit_report import fit_tables
from dunhamfit.show.hand_over import constants_csv, covariance_csv, job_text, line_files


@click.command()
@click.argument("archive", type=click.Path(dir_okay=False, path_type=Path))
@click.option("--to", "folder", required=True, metavar="DIR", type=click.Path(file_okay=False, path_type=Path))
@click.option("--run", type=int, help="Number of the run; by default the last one.")
@click.option("--force", is_flag=True, help="Write over files that are there and differ.")
@quiet_option
def command(archive: Path, folder: Path, run: int | None, force: bool, quiet: bool) -> None:
    """Write a run of ARCHIVE into DIR: constants, covariance, lines with residuals, and a job that fits them."""
    output = Output(quiet=quiet)
    with open_archive(archive) as store:
        stored = store.stored(run or store.latest_number() or 1)
    fit = stored.fit
    document = fit_document(fit, run=stored.run, parent=stored.parent, notices=stored.notices)
    files = {
        "constants.json": json_text(document),
        "constants.csv": constants_csv(fit),
        "covariance.csv": covariance_csv(fit),
        "tables.txt": parts_text(fit_tables(fit), width=100, colour=False),
        "job.toml": job_text(fit, title=stored.title, extra_model=stored.origin.get("model")),
        **line_files(fit),
    }
    write_files(folder, files, force=force)
    output.remark(f"wrote run {stored.run} into {folder}; 'dunhamfit fit {folder}/job.toml' repeats it")


def write_files(folder: Path, files: dict[str, str], *, force: bool) -> None:
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
