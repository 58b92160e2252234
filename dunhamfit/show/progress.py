"""A progress bar for people who watch a terminal, and nothing at all for everybody else."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import TextIO

from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn


def is_terminal(stream: TextIO) -> bool:
    """Whether a person watches `stream`: a terminal that can move its cursor."""
    return stream.isatty() and os.environ.get("TERM") != "dumb"


@contextmanager
def progress(label: str, *, stream: TextIO, quiet: bool = False) -> Iterator[Callable[[int, int], None]]:
    """Show how far a long piece of work has come; the bar goes away when the work ends.

    Parameters
    ----------
    label : str
    stream : text stream
        Where the bar goes, standard error as a rule. Where it is no terminal nothing is written.
    quiet : bool
        Show nothing on a terminal either.

    Yields
    ------
    callable
        ``report(done, total)``: steps done so far and steps in all.
    """
    if quiet or not is_terminal(stream):
        yield _ignore
        return
    bar = Progress(
        TextColumn("{task.description}", markup=False),
        BarColumn(),
        MofNCompleteColumn(),
        TimeRemainingColumn(),
        console=Console(file=stream),
        transient=True,
    )
    with bar:
        task = bar.add_task(label, total=None)

        def report(done: int, total: int) -> None:
            bar.update(task, completed=done, total=total)

        yield report


def _ignore(done: int, total: int) -> None:
    """The report that is shown to nobody."""
