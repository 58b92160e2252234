"""Medians over interleaved runs, and the tables that show them."""

from __future__ import annotations

import statistics
import time


def medians(actions, repeats: int) -> list[float]:
    """Median time of each action in seconds; they take turns, so that a busy spell meets all of them.

    Parameters
    ----------
    actions : sequence of callables without arguments
    repeats : int
    """
    times = [[] for _ in actions]
    for _ in range(repeats):
        for action, spent in zip(actions, times, strict=True):
            start = time.perf_counter()
            action()
            spent.append(time.perf_counter() - start)
    return [statistics.median(spent) for spent in times]


def print_table(head, rows) -> None:
    """Text columns: the first one to the left, the others to the right."""
    table = [tuple(head), *(tuple(str(cell) for cell in row) for row in rows)]
    widths = [max(len(row[i]) for row in table) for i in range(len(head))]
    for row in table:
        cells = [
            row[0].ljust(widths[0]),
            *(cell.rjust(width) for cell, width in zip(row[1:], widths[1:], strict=True)),
        ]
        print("  ".join(cells).rstrip())
