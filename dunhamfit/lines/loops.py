"""Closed loops of bands: do (2-0), (1-0) and (2-1) agree on the place of their shared levels?

The closure of a loop is the sum of the offsets of its bands, each taken in the direction in
which the loop runs along it; zero if nothing is shifted. It sees what combination differences cannot: an
offset that all lines of a band share (common practice).

Offsets that a source states as a shared uncertainty enter the covariance of the closures: the
bands of one source share one offset, so a loop within one source sees it as often as its
directions do not cancel. Scale errors are in the network already.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import cholesky, solve_triangular, svd

from dunhamfit.lines.line_list import LineList
from dunhamfit.lines.network import Network
from dunhamfit.lines.suspects import Finding, Threshold, find_suspects


@dataclass(frozen=True)
class LoopBand:
    """One band of a loop: `times` is +1 where the loop runs along it from v'' to v', -1 the other way."""

    band: str
    source: str
    times: float


@dataclass(frozen=True)
class Loop:
    """One closed loop of bands.

    Attributes
    ----------
    isotopologue : str
    bands : tuple of LoopBand
    closure : float, cm-1
        Weighted mean over all lines; zero if the bands agree.
    sigma : float, cm-1
        From the uncertainties of the lines and the stated offsets and scale errors of the sources;
        infinite where an offset without prior leaves the loop open.
    """

    isotopologue: str
    bands: tuple[LoopBand, ...]
    closure: float
    sigma: float

    @property
    def z(self) -> float:
        """Closure in units of sigma."""
        return self.closure / self.sigma


def list_loops(lines: LineList, network: Network) -> tuple[Loop, ...]:
    """The independent loops of one isotopologue with their closures."""
    bands = network.bands
    counted = _source_sums(lines, network)
    shared = np.zeros_like(counted)
    np.multiply(counted, _offsets(lines), out=shared, where=counted != 0.0)  # 0 times infinity is 0 here
    variance = np.diag(network.covariance) + np.sum(shared**2, axis=1)
    name = lines.isotopologues[lines.isotopologue[network.lines[0]]]
    found = []
    for row, closure, square in zip(bands.loops, network.closure, variance, strict=True):
        members = tuple(
            LoopBand(band_name(network, number), lines.sources[bands.source[number]].name, float(row[number]))
            for number in np.flatnonzero(row)
        )
        found.append(Loop(name, members, float(closure), float(np.sqrt(square))))
    return tuple(found)


def band_name(network: Network, number: int) -> str:
    """`2-0` for the band of that number."""
    return f"{network.bands.v_upper[number]}-{network.bands.v_lower[number]}"


def looped_bands(network: Network) -> np.ndarray:
    """Numbers of the bands that some loop runs along."""
    return np.flatnonzero(np.any(network.bands.loops != 0.0, axis=0))


def shifted_bands(lines: LineList, network: Network, threshold: Threshold) -> tuple[Finding, ...]:
    """Bands (by number) whose offset alone explains closures that are not zero; sizes in cm-1.

    With closures L, their covariance C and the loop matrix S, the shift of band b has the numerator
    s_b' C^-1 L with covariance S' C^-1 S, as the residuals of a network have; `find_suspects` does the rest.
    """
    numbers = looped_bands(network)
    if not len(numbers):
        return ()
    root = cholesky(network.covariance, lower=True)
    joined = np.column_stack([network.bands.loops[:, numbers], network.closure])
    whitened = solve_triangular(root, joined, lower=True)
    offsets = solve_triangular(root, _source_sums(lines, network), lower=True)
    products = whitened.T @ _without_offsets(offsets, _offsets(lines)) @ whitened
    matrix, numerator = products[:-1, :-1], products[:-1, -1]
    known = np.sqrt(np.maximum(np.diag(matrix), 0.0))
    # A band that only an offset without prior could shift keeps nothing but rounding.
    bare = np.linalg.norm(whitened[:, :-1], axis=0)
    known = np.where(known > 1e-6 * bare, known, np.inf)
    matrix, numerator = matrix / np.outer(known, known), numerator / known
    found = find_suspects(numerator, np.diag(matrix), lambda i: matrix[:, i], threshold)
    return tuple(
        Finding(
            int(numbers[item.number]),
            item.size / float(known[item.number]),
            item.sigma / float(known[item.number]),
            tuple(int(numbers[rival]) for rival in item.rivals),
        )
        for item in found
    )


def _source_sums(lines: LineList, network: Network) -> np.ndarray:
    """How often each loop counts the offset of each source, shape (n_loops, n_sources)."""
    sums = np.zeros((len(network.bands.loops), len(lines.sources)))
    np.add.at(sums.T, network.bands.source, network.bands.loops.T)
    return sums


def _offsets(lines: LineList) -> np.ndarray:
    return np.array([source.offset or 0.0 for source in lines.sources])


def _without_offsets(shared: np.ndarray, offset: np.ndarray) -> np.ndarray:
    """What the stated offsets of the sources leave of whitened closures, shape (n_loops, n_loops).

    The offsets are unknowns with their priors as further rows of a least-squares problem. With U
    its left singular vectors restricted to the closures, I - U U' takes the place of the identity as the
    inverse covariance of the whitened closures; an offset without prior needs no limit.
    """
    chosen = (offset > 0.0) & np.any(shared != 0.0, axis=0)
    if not chosen.any():
        return np.eye(len(shared))
    rows = np.vstack([shared[:, chosen], np.diag(1.0 / offset[chosen])])
    left, size, _ = svd(rows / np.linalg.norm(rows, axis=0), full_matrices=False)
    left = left[: len(shared), size > 1e-10 * size[0]]
    return np.eye(len(shared)) - left @ left.T
