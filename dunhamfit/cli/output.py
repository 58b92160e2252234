"""What every command shares: the common options, and one way to hand over a result.

The result goes to standard output (or the file of `-o`), as tables or as one JSON
object; everything said on the way goes to standard error.
"""

from __future__ import annotations

import json
import math
import os
import sys
from collections.abc import Callable, Iterable, Mapping, Sequence
from contextlib import AbstractContextManager
from dataclasses import dataclass, field
from pathlib import Path
from typing import TextIO

import click

from dunhamfit.cli.messages import say, write
from dunhamfit.errors import UsageError
from dunhamfit.show.escape import escape_controls
from dunhamfit.show.latex import to_latex
from dunhamfit.show.progress import is_terminal, progress
from dunhamfit.show.tables import Table, records_to_csv, to_text

PLAIN_WIDTH = 80  # where the width of the output is not known

json_option = click.option(
    "--json",
    "as_json",
    is_flag=True,
    help="Print one JSON object, numbers at full precision, and nothing else.",
)
quiet_option = click.option(
    "--quiet", is_flag=True, help="No progress and no remarks; the result, warnings and errors remain."
)
file_option = click.option(
    "-o",
    "path",
    metavar="FILE",
    type=click.Path(dir_okay=False, path_type=Path),
    help="Write the result to FILE, which ends in .json, .csv (full precision), .tex or .txt.",
)


@dataclass(frozen=True)
class Output:
    """Where a command puts its result and its remarks.

    Attributes
    ----------
    as_json, quiet, path
        The values of `json_option`, `quiet_option` and `file_option`.
    stdout, stderr : text stream
    """

    as_json: bool = False
    quiet: bool = False
    path: Path | None = None
    stdout: TextIO = field(default_factory=lambda: sys.stdout)
    stderr: TextIO = field(default_factory=lambda: sys.stderr)

    def result(
        self,
        document: Mapping[str, object],
        parts: Iterable[Table | str],
        *,
        records: Sequence[Mapping[str, object]] | None = None,
    ) -> None:
        """Hand over the result of the command; call it once.

        Parameters
        ----------
        document : mapping
            The result as the JSON object.
        parts : iterable of Table or str
            The same result for a reader, top to bottom.
        records : sequence of mappings, optional
            The flat records that a CSV file holds, for commands whose result is one list.

        Raises
        ------
        UsageError
            If `-o` names a kind of file that this result cannot be written as.
        """
        if self.path is not None:
            text = self._file_text(self.path, document, parts, records)
            self.path.write_text(text, encoding="utf-8", newline="\n")
            self.remark(f"wrote {self.path}")
        elif self.as_json:
            write(json_text(document), self.stdout)
        else:
            colour = is_terminal(self.stdout) and not os.environ.get("NO_COLOR")
            write(parts_text(parts, width=terminal_width(self.stdout), colour=colour), self.stdout)

    @property
    def wants_document(self) -> bool:
        """Whether the result goes out as a document, so that a costly one need not be made for nothing."""
        return self.as_json or self.path is not None

    def remark(self, text: str) -> None:
        """Say something in passing; `--quiet` silences it."""
        if not self.quiet:
            say(text, self.stderr)

    def warn(self, text: str) -> None:
        """Say something that the reader must know."""
        say(f"warning: {text}", self.stderr)

    def progress(self, label: str) -> AbstractContextManager[Callable[[int, int], None]]:
        """A progress bar on standard error; see `dunhamfit.show.progress.progress`."""
        return progress(label, stream=self.stderr, quiet=self.quiet)

    def _file_text(self, path: Path, document, parts, records) -> str:
        ending = path.suffix.lower()
        if self.as_json and ending != ".json":
            raise UsageError(
                f"--json writes JSON, but -o names {path}; end the name in .json or leave out --json"
            )
        if ending == ".json":
            return json_text(document)
        if ending == ".csv" and records is None:
            raise UsageError(
                f"{path} cannot be written: this result is not one list; use .json, .tex or .txt"
            )
        if ending == ".csv":
            return records_to_csv(records)
        if ending == ".tex":
            return "\n".join(to_latex(part) for part in parts if isinstance(part, Table))
        if ending == ".txt":
            return parts_text(parts, width=PLAIN_WIDTH, colour=False)
        # Anything else is refused, so that a slip never writes a table over an archive.
        raise UsageError(f"-o must name a file that ends in .json, .csv, .tex or .txt (got {path})")


def terminal_width(stream: TextIO) -> int:
    """Columns of the terminal behind `stream`; 80 where there is none."""
    if not is_terminal(stream):
        return PLAIN_WIDTH
    try:
        return os.get_terminal_size(stream.fileno()).columns or PLAIN_WIDTH
    except OSError:
        return PLAIN_WIDTH


def parts_text(parts: Iterable[Table | str], *, width: int, colour: bool) -> str:
    """Tables and paragraphs one below the other, with a blank line between them."""
    return "\n".join(
        to_text(part, width=width, colour=colour)
        if isinstance(part, Table)
        else escape_controls(part, keep_newlines=True) + "\n"
        for part in parts
    )


def json_text(document: Mapping[str, object]) -> str:
    """One JSON object: floats so that the same double reads back, NaN and infinity as null.

    RFC 8259 knows neither NaN nor infinity. numpy scalars and arrays become numbers and lists; ASCII only.

    Raises
    ------
    TypeError
        If the document holds anything else that JSON does not know.
    """
    try:
        return json.dumps(document, allow_nan=False, default=_from_numpy) + "\n"
    except ValueError:  # a number that is not finite stands somewhere
        return json.dumps(_plain(document), allow_nan=False) + "\n"


def _from_numpy(item: object) -> object:
    """Numpy's numbers and arrays as plain ones; what else JSON does not know is a TypeError."""
    if hasattr(item, "tolist"):
        return item.tolist()
    raise TypeError(f"{type(item).__name__} cannot be written as JSON")


def _plain(item: object) -> object:
    if hasattr(item, "tolist"):
        item = item.tolist()
    if isinstance(item, Mapping):
        return {str(key): _plain(value) for key, value in item.items()}
    if isinstance(item, (list, tuple)):
        return [_plain(value) for value in item]
    if isinstance(item, float) and not math.isfinite(item):
        return None
    return item
