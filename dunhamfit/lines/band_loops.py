"""Bands as the edges of a graph whose points are the vibrational levels, and the closed loops they form.

A band (v', v'') of one source joins v'' to v'. A spanning tree of these edges reaches every
vibrational level once; each further band closes one loop with the tree, such as
(2-1) - (2-0) + (1-0), and two sources of the same band close a loop of two. The tree is grown
breadth first from the lowest v, so loops are as short as they can be. A band with v' = v''
(pure rotation, for one) is a loop by itself.
"""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True, eq=False)
class BandLoops:
    """The bands of one isotopologue and a basis of their closed loops.

    Attributes
    ----------
    v_upper, v_lower, source : ndarray of int, shape (n_bands,)
        What identifies each band; sources by their code in the LineList.
    band : ndarray of int, shape (n_lines,)
        The band of each line.
    chord : ndarray of int, shape (n_bands,)
        Number of the loop that the band closes, or -1 for a band of the tree.
    loops : ndarray of float, shape (n_loops, n_bands)
        How often each loop runs along each band: +1 from v'' to v', -1 the other way.
    """

    v_upper: np.ndarray
    v_lower: np.ndarray
    source: np.ndarray
    band: np.ndarray
    chord: np.ndarray
    loops: np.ndarray


def find_loops(v_upper, v_lower, source, weight) -> BandLoops:
    """Group lines into bands and close the loops.

    Parameters
    ----------
    v_upper, v_lower, source : ndarray of int, shape (n_lines,)
        Lines of one isotopologue.
    weight : ndarray of float, shape (n_lines,)
        1/sigma^2; of two sources of one band the better known one joins the tree.
    """
    keys, band = np.unique(np.stack([v_upper, v_lower, source], axis=1), axis=0, return_inverse=True)
    band = band.ravel()
    total = np.bincount(band, weights=weight, minlength=len(keys))
    touching: dict[int, list[int]] = {}
    # Rounded, so that the order of the lines decides nothing between bands known equally well.
    for number in np.argsort(-np.round(total / total.max(), 9), kind="stable"):
        upper, lower, _ = keys[number]
        if upper != lower:
            touching.setdefault(int(upper), []).append(int(number))
            touching.setdefault(int(lower), []).append(int(number))

    # `path[v]` tells how often the way through the tree to v runs along each band.
    path = {int(v): np.zeros(len(keys)) for v in (*v_upper, *v_lower)}
    reached: set[int] = set()
    tree: set[int] = set()
    for root in sorted(path):
        if root in reached:
            continue
        reached.add(root)
        waiting = deque([root])
        while waiting:
            here = waiting.popleft()
            for number in touching.get(here, []):
                upper, lower = int(keys[number, 0]), int(keys[number, 1])
                there, sign = (upper, 1.0) if here == lower else (lower, -1.0)
                if there not in reached:
                    reached.add(there)
                    tree.add(number)
                    path[there] = path[here].copy()
                    path[there][number] += sign
                    waiting.append(there)

    chord = np.full(len(keys), -1)
    loops = []
    for number, (upper, lower, _) in enumerate(keys):
        if number not in tree:
            chord[number] = len(loops)
            loop = path[int(lower)] - path[int(upper)]
            loop[number] += 1.0
            loops.append(loop)
    return BandLoops(
        keys[:, 0], keys[:, 1], keys[:, 2], band, chord, np.array(loops).reshape(len(loops), len(keys))
    )
