"""Combination differences: lines that disagree with the other bands that share their levels.

Delta2F''(J) = R(J-1) - P(J+1) belongs to the lower level alone and Delta2F'(J) = R(J) - P(J) to the
upper one (common practice), so every band with the same v'' must give the same Delta2F''. All of them
at once, with their weights and with the lines they share, are the residuals of a network of
levels in which every band has a free offset (`network.py`); a line is tested by leaving it out.
"""

from __future__ import annotations

import numpy as np

from dunhamfit.lines.network import Network
from dunhamfit.lines.suspects import REDUNDANCY_FLOOR, Finding, Threshold, find_suspects


def checked_lines(network: Network) -> np.ndarray:
    """Mask of the lines that other lines check, shape (n,)."""
    return network.redundancy > REDUNDANCY_FLOOR


def shifted_lines(network: Network, threshold: Threshold) -> tuple[Finding, ...]:
    """Lines (by their number in the network) that the differences name; sizes in units of their sigma."""
    return find_suspects(network.residual, network.redundancy, network.cofactors, threshold)
