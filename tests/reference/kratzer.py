"""Exact levels and exact Dunham coefficients of the Kratzer-Fues potential V = D (1 - r_e/r)^2.

Closed form, with gamma^2 = D/B (A. Kratzer, Z. Phys. 3, 289 (1920); E. Fues, Ann. Phys. 80,
367 (1926); from memory):

    E(v, J) = D - B gamma^4 / (v + 1/2 + sqrt(gamma^2 + 1/4 + J(J + 1)))^2.

The Y_kl are its Taylor coefficients in v + 1/2 and J(J + 1), to 18 digits; closed form and
series agree to 25 digits. No noise and no fit enter. B and gamma are near those of carbon
monoxide.
"""

from __future__ import annotations

import json
from pathlib import Path

from mpmath import mp, mpf, sqrt

_TABLE = json.loads(Path(__file__).with_name("kratzer_exact.json").read_text(encoding="utf-8"))
# Y_kl in cm-1, as text, for k and l up to 5 and 4.
EXACT_Y = {tuple(int(i) for i in key.split(",")): value for key, value in _TABLE["Y"].items()}
# E(v, J) in cm-1, as text.
EXACT_LEVELS = {tuple(int(i) for i in key.split(",")): value for key, value in _TABLE["levels"].items()}


def level(v: int, j: int) -> mpf:
    """E(v, J) in cm-1, at the working precision of mpmath."""
    b, gamma = mpf(_TABLE["B"]), mpf(_TABLE["gamma"])
    root = sqrt(gamma**2 + mpf(1) / 4 + j * (j + 1))
    return b * gamma**2 - b * gamma**4 / (v + mpf(1) / 2 + root) ** 2


def position(v_upper: int, j_upper: int, v_lower: int, j_lower: int) -> float:
    """Exact line position, rounded to the nearest float, cm-1."""
    with mp.workdps(40):
        return float(level(v_upper, j_upper) - level(v_lower, j_lower))
