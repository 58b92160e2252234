"""Simulated line lists for tests: an invented molecule, with constants near nothing that was measured.

E(v, J) = sum_kl Y_kl (v + 1/2)^k [J(J+1)]^l (J. L. Dunham, Phys. Rev. 41, 721 (1932)).
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from dunhamfit.lines.line_list import LineList, Source

CONSTANTS = {(1, 0): 650.0, (2, 0): -2.4, (0, 1): 0.41, (1, 1): -2.1e-3, (0, 2): -6.5e-7, (1, 2): -2e-9}


def energy(v, j, constants=None):
    """Term value in cm-1."""
    v, j = np.asarray(v, dtype=float), np.asarray(j, dtype=float)
    chosen = CONSTANTS if constants is None else constants
    return sum(value * (v + 0.5) ** k * (j * (j + 1)) ** power for (k, power), value in chosen.items())


def transitions(v_upper: int, v_lower: int, j_max: int):
    """J', J'' of all R and P lines with J'' <= j_max; R lines only where v' = v''."""
    r = np.arange(j_max + 1)
    p = np.arange(1, j_max + 1) if v_upper != v_lower else np.arange(0)
    return np.concatenate([r + 1, p - 1]), np.concatenate([r, p])


def bands(
    *names: str,
    j_max: int = 20,
    sigma: float = 1e-4,
    source: Source | None = None,
    isotopologue: str = "28Si32S",
    constants=None,
) -> LineList:
    """Noiseless lines of the bands "1-0", "2-1", ...; one source, rows in order."""
    pieces = []
    for name in names:
        v_upper, v_lower = (int(text) for text in name.split("-"))
        j_upper, j_lower = transitions(v_upper, v_lower, j_max)
        same = np.ones_like(j_lower)
        pieces.append(np.stack([v_upper * same, j_upper, v_lower * same, j_lower]))
    v_upper, j_upper, v_lower, j_lower = np.concatenate(pieces, axis=1)
    count = len(v_upper)
    zero = np.zeros(count, dtype=int)
    return LineList(
        position=energy(v_upper, j_upper, constants) - energy(v_lower, j_lower, constants),
        sigma=np.full(count, sigma),
        v_upper=v_upper,
        j_upper=j_upper,
        v_lower=v_lower,
        j_lower=j_lower,
        isotopologue=zero,
        source=zero,
        file=zero,
        row=np.arange(1, count + 1),
        exclusion=zero,
        isotopologues=(isotopologue,),
        sources=(source or Source("bench", ("bench.csv",)),),
    )


def moved(lines: LineList, shift) -> LineList:
    """The same lines with `shift` (cm-1, scalar or (n_lines,)) added to the positions."""
    return replace(lines, position=lines.position + shift)


def noisy(lines: LineList, rng: np.random.Generator) -> LineList:
    """The same lines with Gaussian errors of their own sigma."""
    return moved(lines, rng.normal(0.0, lines.sigma))


def of_band(lines: LineList, name: str) -> np.ndarray:
    """Mask of the lines of one band."""
    v_upper, v_lower = (int(text) for text in name.split("-"))
    return (lines.v_upper == v_upper) & (lines.v_lower == v_lower)


def line(lines: LineList, name: str, label: str) -> int:
    """Index of one line, such as ("2-0", "P(7)")."""
    step, j_lower = (1 if label[0] == "R" else -1), int(label[2:-1])
    found = of_band(lines, name) & (lines.j_lower == j_lower) & (lines.j_upper - lines.j_lower == step)
    return int(np.flatnonzero(found)[0])
