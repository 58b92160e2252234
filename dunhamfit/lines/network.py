"""Term values of one isotopologue from its lines alone, with one free offset for each band of each source.

A line is position = E(v', J') - E(v'', J'') + offset(band). No formula for E is assumed: every
level is an unknown of its own. A free offset for every band makes this network blind to
whatever shifts a band as a whole, so its residuals hold exactly what the combination
differences hold (Delta2F''(J) = R(J-1) - P(J+1) and Delta2F'(J) = R(J) - P(J), common
practice): all differences of a level that several bands give are averaged with their weights.
The offsets that the lines do determine are the closures of the loops of bands.

The level energies absorb the offsets of a spanning tree of bands, so only the bands that close a
loop (`band_loops.py`) carry an offset; that offset is the closure of the loop. A source with
a stated scale error brings one more unknown, with its prior as a row of its own.
"""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass, replace

import numpy as np
from scipy.linalg import qr, solve_triangular

from dunhamfit.lines.band_loops import BandLoops, find_loops
from dunhamfit.lines.line_list import LineList
from dunhamfit.lines.shells import Rows, ShellFactor, factorise

# A scale error "without prior" gets this one (1 sigma, a fraction): far wider than the
# calibration of any spectrometer, and narrow enough to keep the arithmetic sound.
WIDE_SCALE = 1e-4


@dataclass(frozen=True, eq=False)
class Network:
    """The adjusted network of one isotopologue.

    Attributes
    ----------
    lines : ndarray of int, shape (n,)
        Index of each line in the LineList.
    bands : BandLoops
        Bands and loops; its `loops` are those whose closure the lines determine.
    residual : ndarray of float, shape (n,)
        Whitened residuals (in units of sigma).
    redundancy : ndarray of float, shape (n,)
        The share of each line that the other lines check: 0 for none, 1 for all; the variance of
        `residual` where the stated uncertainties hold.
    closure : ndarray of float, shape (n_loops,), cm-1
    covariance : ndarray of float, shape (n_loops, n_loops), cm-2
        From the uncertainties of the lines and the stated scale errors.
    factor : ShellFactor
    """

    lines: np.ndarray
    bands: BandLoops
    residual: np.ndarray
    redundancy: np.ndarray
    closure: np.ndarray
    covariance: np.ndarray
    factor: ShellFactor

    def cofactors(self, number: int) -> np.ndarray:
        """Covariance of the whitened residual of line `number` with all others, shape (n,)."""
        unit = np.zeros(len(self.factor.rows.index))
        unit[number] = 1.0
        return self.factor.residuals(unit)[: len(self.lines)]


def adjust(lines: LineList, choice: np.ndarray) -> Network:
    """Solve the network of the lines that `choice` (indices; one isotopologue) picks."""
    part = lines.subset(choice)
    bands = find_loops(part.v_upper, part.v_lower, part.source, part.sigma**-2.0)
    levels, upper, lower = _levels(part)
    walk = _walk(part.position, upper, lower, bands, levels)
    bands = _determined(bands, walk.winding)

    # Unknowns: levels shell by shell, without the fixed one of each connected piece; then the border.
    free = np.setdiff1d(np.arange(len(levels)), walk.fixed)
    bounds = np.append(0, np.cumsum(np.unique(levels[free, 0], return_counts=True)[1]))
    scaled = [code for code, source in enumerate(lines.sources) if source.scale]
    scale_number = np.full(len(lines.sources), -1)
    scale_number[scaled] = np.arange(len(scaled))
    unknowns = len(free) + len(bands.loops) + len(scaled)

    column = np.full(len(levels), unknowns)
    column[free] = np.arange(len(free))
    closing, scaling = bands.chord[bands.band], scale_number[part.source]
    index = np.stack(
        [
            column[upper],
            column[lower],
            np.where(closing >= 0, len(free) + closing, unknowns),
            np.where(scaling >= 0, len(free) + len(bands.loops) + scaling, unknowns),
        ],
        axis=1,
    )
    prior = np.array([min(source.scale or 0.0, WIDE_SCALE) for source in lines.sources])
    ones = np.ones(len(part))
    coefficient = np.stack([ones, -ones, ones, part.position * prior[part.source]], axis=1)
    coefficient /= part.sigma[:, None]

    # The unknown of a scale error is counted in units of its prior: the prior is then the row "1 = 0 +- 1".
    prior_index = np.full((len(scaled), 4), unknowns)
    prior_index[:, 3] = unknowns - len(scaled) + np.arange(len(scaled))
    prior_rows = np.zeros((len(scaled), 4))
    prior_rows[:, 3] = 1.0
    rows = Rows(np.vstack([index, prior_index]), np.vstack([coefficient, prior_rows]), unknowns)
    observed = np.concatenate([walk.misclosure / part.sigma, np.zeros(len(scaled))])

    factor = factorise(rows, bounds)
    solution = factor.solve(observed)
    loops = slice(len(free), len(free) + len(bands.loops))
    count = len(bands.loops)
    return Network(
        lines=np.asarray(choice),
        bands=bands,
        residual=(observed - rows.times(solution))[: len(part)],
        redundancy=1.0 - factor.leverages()[: len(part)],
        closure=solution[loops],
        covariance=factor.border_covariance()[:count, :count],
        factor=factor,
    )


@dataclass(frozen=True, eq=False)
class _Walk:
    """What a walk through all levels along single lines finds.

    fixed: the level of each connected piece whose energy is set to zero, in its highest shell;
    misclosure, (n,), cm-1: position less the difference of the energies found on the walk;
    winding, (n, n_loops): how often the closed path of each line runs through each closing band.
    """

    fixed: np.ndarray
    misclosure: np.ndarray
    winding: np.ndarray


def _levels(part: LineList) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Levels (shell, v, J) in order, and the number of each line's upper and lower level."""
    width = max(1, int(np.abs(part.j_upper - part.j_lower).max()))
    v, j = np.concatenate([part.v_upper, part.v_lower]), np.concatenate([part.j_upper, part.j_lower])
    levels, number = np.unique(np.stack([j // width, v, j], axis=1), axis=0, return_inverse=True)
    upper, lower = number.reshape(2, -1)
    return levels, upper, lower


def _walk(position, upper, lower, bands: BandLoops, levels) -> _Walk:
    touching: list[list[int]] = [[] for _ in levels]
    for line, (high, low) in enumerate(zip(upper.tolist(), lower.tolist(), strict=True)):
        touching[high].append(line)
        touching[low].append(line)
    steps = np.zeros((len(position), len(bands.loops)), dtype=int)
    closing = bands.chord[bands.band]
    steps[closing >= 0, closing[closing >= 0]] = 1

    energy, winding = np.zeros(len(levels)), np.zeros((len(levels), len(bands.loops)), dtype=int)
    reached = np.zeros(len(levels), dtype=bool)
    fixed = []
    for root in range(len(levels) - 1, -1, -1):
        if reached[root]:
            continue
        # Levels are in order of their shell: the first one met from above is in the highest shell.
        fixed.append(root)
        reached[root] = True
        waiting = deque([root])
        while waiting:
            here = waiting.popleft()
            for line in touching[here]:
                up = here == lower[line]
                there, sign = (upper[line], 1) if up else (lower[line], -1)
                if not reached[there]:
                    reached[there] = True
                    energy[there] = energy[here] + sign * position[line]
                    winding[there] = winding[here] + sign * steps[line]
                    waiting.append(there)
    return _Walk(
        np.array(fixed),
        position - (energy[upper] - energy[lower]),
        steps - (winding[upper] - winding[lower]),
    )


def _determined(bands: BandLoops, winding: np.ndarray) -> BandLoops:
    """The same bands with only those loops that closed paths of lines determine.

    Where lines run only through a sum of loops (bands that overlap in no J, for one), the loop
    kept stands for that sum. The windings are small whole numbers, so their rank is beyond doubt.
    """
    paths = np.unique(winding, axis=0).astype(float)
    order, rank = np.arange(len(bands.loops)), 0
    mixed = np.zeros((0, len(bands.loops)))
    if paths.any():
        triangle, order = qr(paths, mode="r", pivoting=True)
        diagonal = np.abs(np.diag(triangle))
        rank = int(np.sum(diagonal > 1e-8 * diagonal[0]))
        mixed = solve_triangular(triangle[:rank, :rank], triangle[:rank, rank:])
    loops = bands.loops[order[:rank]] + mixed @ bands.loops[order[rank:]]
    in_order = np.argsort(order[:rank])
    renumbered = np.full(len(bands.loops) + 1, -1)
    renumbered[order[:rank][in_order]] = np.arange(rank)
    # Bands of the tree have chord -1: that picks the last entry, which is -1 too.
    return replace(bands, chord=renumbered[bands.chord], loops=np.round(loops[in_order], 12))
