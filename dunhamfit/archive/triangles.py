"""Triangles in the archive: with them a long list need not be read again to go on from a run.

R depends on the lines, their weights and the terms, and not on the base or the noise factors, so
that runs which differ in the latter share it. What belongs to the run (z about its values, rss)
stands with the run.
"""

from __future__ import annotations

from collections.abc import Mapping

import h5py
import numpy as np

from dunhamfit.algebra.triangle import Triangle
from dunhamfit.archive.schema import FACTORS, Value, read_once, write_once
from dunhamfit.errors import ArchiveProblem
from dunhamfit.fit.record import Fit


def triangles_pay(fit: Fit) -> bool:
    """Whether the triangles of a fit take fewer numbers than there are lines.

    They are the shorter way for long lists. Short ones are whitened and reduced again in less time
    than it takes to store that many numbers.
    """
    parameters = len(fit.values)
    rows = np.minimum(fit.groups.lines, parameters)
    return int(np.sum(rows * parameters - rows * (rows - 1) // 2)) <= len(fit.lines)


def write_factors(file: h5py.File, fit: Fit) -> dict[str, object]:
    """Write R of `fit.triangles` under /factors, one entry for each source and one for the priors.

    Returns
    -------
    dict
        What belongs to the run itself, by the names of `dunhamfit.archive.schema.TRIANGLES`.
    """
    triangles = fit.triangles
    owners = np.full(len(triangles), -1)
    owners[: len(fit.groups)] = fit.groups.source
    starts = np.flatnonzero(np.diff(owners, prepend=-2))
    keys = []
    for stretch in np.split(np.arange(len(triangles)), starts[1:]):
        packed = np.concatenate([_packed(triangles[index].r) for index in stretch])
        keys.append(write_once(file, "factors", FACTORS, {"r": packed}))
    return {
        "factors": keys,
        "heights": [len(item.z) for item in triangles],
        "z": np.concatenate([item.shifted(fit.values).z for item in triangles]),
        "rss": [item.rss for item in triangles],
        "n": [item.n for item in triangles],
        "log_sigma": [item.log_sigma for item in triangles],
    }


def read_triangles(file: h5py.File, found: Mapping[str, Value], values: np.ndarray) -> tuple[Triangle, ...]:
    """Triangles about `values`, shape (p,), from what `write_factors` returned."""
    packed = np.concatenate([read_once(file, "factors", key, FACTORS)["r"] for key in found["factors"]])
    width = len(values)
    triangles, entry, row = [], 0, 0
    for height, rss, n, log_sigma in zip(found["heights"], found["rss"], found["n"], found["log_sigma"], strict=True):
        kept = _trapezoid(height, width)
        entries = int(kept.sum())
        r = np.zeros((height, width))
        r[kept] = packed[entry : entry + entries]
        z = found["z"][row : row + height]
        triangles.append(Triangle(r, z, float(rss), int(n), values, float(log_sigma)))
        entry, row = entry + entries, row + height
    if (entry, row) != (len(packed), len(found["z"])):
        raise ArchiveProblem("the triangles do not fit their factors: the archive is damaged")
    return tuple(triangles)


def _packed(r: np.ndarray) -> np.ndarray:
    return r[_trapezoid(*r.shape)]


def _trapezoid(height: int, width: int) -> np.ndarray:
    """Mask of the entries of R that are not zero by construction."""
    return np.arange(width) >= np.arange(height)[:, None]
