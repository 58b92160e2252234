r"""Constants of each vibrational level, and band origins.

    G(v) = sum_k Y_k0 (v + 1/2)^k      B_v = sum_k Y_k1 (v + 1/2)^k
    D_v = -sum_k Y_k2 (v + 1/2)^k      H_v = sum_k Y_k3 (v + 1/2)^k

G(v) is without Y00, which drops out of every difference; the origin of band v-0 is G(v) - G(0).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from dunhamfit.errors import UsageError
from dunhamfit.fit.record import Fit
from dunhamfit.results.isotopologues import own_constants
from dunhamfit.results.observed import highest_v

# Name, l and sign.
_KINDS = (("G", 0, 1.0), ("origin", 0, 1.0), ("B", 1, 1.0), ("D", 2, -1.0), ("H", 3, 1.0))


@dataclass(frozen=True, eq=False)
class VibrationalConstants:
    """G_v, band origin, B_v, D_v and H_v of levels v = 0..n - 1 of one isotopologue.

    Attributes
    ----------
    isotopologue : str
    names : tuple of str
        "G", "origin" (of band v-0), "B", "D", "H"; only those for which the fit has terms.
    values, sigmas : ndarray of float, shape (names, n), cm-1
    factor : ndarray of float, shape (names, n, q), cm-1
        F with covariance F F^T over all names and levels; masses included.
    """

    isotopologue: str
    names: tuple[str, ...]
    values: np.ndarray
    factor: np.ndarray

    @cached_property
    def sigmas(self) -> np.ndarray:
        return np.sqrt((self.factor**2).sum(axis=2))

    @property
    def v(self) -> np.ndarray:
        """0..n - 1."""
        return np.arange(self.values.shape[1])

    @cached_property
    def covariance(self) -> np.ndarray:
        """Shape (names * n, names * n), name by name, cm-2."""
        rows = self.factor.reshape(-1, self.factor.shape[2])
        return rows @ rows.T


def vibrational_constants(
    fit: Fit, isotopologue: str | None = None, *, v_max: int | None = None
) -> VibrationalConstants:
    """Constants of the levels v = 0..v_max.

    Parameters
    ----------
    fit : Fit
    isotopologue : str, optional
        The reference if not given.
    v_max : int, optional
        The highest v that a used line reaches if not given.

    Raises
    ------
    UsageError
    """
    own = own_constants(fit, isotopologue)
    v_max = highest_v(fit) if v_max is None else v_max
    if v_max < 0:
        raise UsageError(f"v_max must be 0 or more (got {v_max})")
    x = np.arange(v_max + 1) + 0.5
    k, l = np.array([(term.k, term.l) for term in own.terms]).T
    factor = np.hstack([own.factor, own.mass_factor])
    names, values, factors = [], [], []
    for name, of_l, sign in _KINDS:
        if not np.any(l == of_l):
            continue
        rows = sign * np.where(l == of_l, x[:, None] ** k, 0.0)
        if name == "origin":
            rows = rows - rows[0]
        names.append(name)
        values.append(rows @ own.values)
        factors.append(rows @ factor)
    return VibrationalConstants(own.isotopologue.name, tuple(names), np.array(values), np.array(factors))
