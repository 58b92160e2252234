"""Refusal of lines that no weighted check can use."""

from __future__ import annotations

import numpy as np

from dunhamfit.errors import UsageError
from dunhamfit.lines.line_list import LineList


def refuse_unusable(lines: LineList) -> None:
    """Raise UsageError for the first used line without a finite position or a positive, finite sigma."""
    sound = np.isfinite(lines.position) & np.isfinite(lines.sigma) & (lines.sigma > 0.0)
    if np.all(sound | ~lines.used):
        return
    first = int(np.flatnonzero(~sound & lines.used)[0])
    raise UsageError(
        f"{lines.place(first)}: a finite position and a positive uncertainty are needed "
        f"(got {lines.position[first]} +- {lines.sigma[first]}); correct the line or exclude it"
    )
