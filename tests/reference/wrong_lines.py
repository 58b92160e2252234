"""Invented campaigns in which some lines are many sigma off, by numbers alone: no slip explains them."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from dunhamfit.lines.line_list import LineList
from tests.reference.thirteen_terms import SIGMA, campaign

OFF, PART = 20.0, 0.02


def lines_of(
    rng: np.random.Generator, *, factors=(1.0, 1.0, 1.0), wrong: float = PART, off: float = OFF, j_max: int = 60
) -> tuple[LineList, np.ndarray]:
    """A campaign without shared errors, and which of its lines are `off` sigma off."""
    lines = campaign(rng, calibrated=False, shared=0.0, factors=factors, j_max=j_max)
    chosen = rng.choice(len(lines), round(wrong * len(lines)), replace=False)
    position = lines.position.copy()
    position[chosen] += off * SIGMA * np.array(factors)[lines.source[chosen]] * rng.choice([-1, 1], len(chosen))
    return replace(lines, position=position), np.sort(chosen)
