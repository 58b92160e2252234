r"""Levels of a potential curve: the radial Schroedinger equation on an equidistant grid.

    -C psi'' + [V(r) + C J(J + 1)/r^2] psi = E psi,    C = h/(8 pi^2 c mu) = ROTATION_FACTOR/mu

in the basis of sinc functions, one at each grid point, where the potential is diagonal and

    T_ij = C/h^2 (-1)^(i-j) { pi^2/3 for i = j, 2/(i - j)^2 otherwise }

(D. T. Colbert and W. H. Miller, J. Chem. Phys. 96, 1982 (1992), doi:10.1063/1.462100). The error falls
exponentially with the spacing h once psi is resolved and has died away at both ends; both are checked.
What remains is rounding: about 1e-16 of the largest of C (pi/h)^2 and V, so do not let the grid run far up
the wall.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import eigh

from dunhamfit.errors import NotConverged, UsageError
from dunhamfit.molecule.potential import ROTATION_FACTOR

# Largest part of a normalised wavefunction at an end of the grid, or of its spectrum at the shortest wave
# that the grid can hold. The error of the energy is of second order in it.
_LOOSE_END = 1e-6


@dataclass(frozen=True, eq=False)
class LevelConstants:
    """Constants of each vibrational level: E(v, J) = G + B X - D X^2 + H X^3 + ..., X = J(J + 1).

    Attributes
    ----------
    v : ndarray of int, shape (n_v,)
    g, b, d, h : ndarray of float, shape (n_v,), cm-1
        G is above the zero of the potential that was given.
    """

    v: np.ndarray
    g: np.ndarray
    b: np.ndarray
    d: np.ndarray
    h: np.ndarray


def radial_levels(r, energy, *, mu: float, v_max: int, j=(0,)) -> np.ndarray:
    """E(v, J) of a potential on an equidistant grid.

    Parameters
    ----------
    r : array_like of float, shape (n,), A
        Equidistant and rising.
    energy : array_like of float, shape (n,), cm-1
        V at `r`.
    mu : float, u
    v_max : int
        Levels v = 0..v_max.
    j : sequence of int, length n_j

    Returns
    -------
    ndarray of float, shape (v_max + 1, n_j), cm-1

    Raises
    ------
    UsageError
        For a grid that is not equidistant, or too short.
    NotConverged
        Where a wavefunction reaches an end of the grid, or the grid is too coarse for it.
    """
    r, hamiltonian, rotation = _matrices(r, energy, mu, v_max)
    levels = np.empty((v_max + 1, len(j)))
    for column, rotational in enumerate(j):
        turning = hamiltonian + np.diag(rotational * (rotational + 1) * rotation)
        levels[:, column], states = eigh(turning, subset_by_index=[0, v_max])
        _check_states(r, states)
    return levels


def level_constants(r, energy, *, mu: float, v_max: int) -> LevelConstants:
    """G_v, B_v, D_v and H_v of a potential on an equidistant grid; arguments as `radial_levels`.

    Notes
    -----
    They are the derivatives of E by J(J + 1) at zero, from Rayleigh-Schroedinger perturbation theory with
    C/r^2 as the perturbation over all states of the grid; a fit to a few J would mix in the neglected orders.
    """
    r, hamiltonian, rotation = _matrices(r, energy, mu, v_max)
    levels, states = eigh(hamiltonian)
    _check_states(r, states[:, : v_max + 1])
    coupling = states.T @ (rotation[:, None] * states)
    constants = np.empty((v_max + 1, 3))
    for v in range(v_max + 1):
        # Orders of the energy and of the state, which has no part along the unperturbed one.
        gap = levels[v] - levels
        gap[v] = np.inf
        first = coupling[v, v]
        state1 = coupling[:, v] / gap
        second = coupling[v] @ state1
        state2 = (coupling @ state1 - first * state1) / gap
        constants[v] = first, -second, coupling[v] @ state2
    kept = np.arange(v_max + 1)
    return LevelConstants(kept, levels[: v_max + 1], constants[:, 0], constants[:, 1], constants[:, 2])


def _matrices(r, energy, mu: float, v_max: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Grid, T + V of shape (n, n), and C/r^2 of shape (n,)."""
    r, energy = np.asarray(r, dtype=float), np.asarray(energy, dtype=float)
    if r.ndim != 1 or r.shape != energy.shape or not np.all(np.isfinite(energy)):
        raise UsageError(
            f"'r' and 'energy' must be rows of one length, and finite (got shapes {r.shape} and {energy.shape})"
        )
    if len(r) < v_max + 10 or v_max < 0:
        raise UsageError(f"the grid must have at least v_max + 10 points (got {len(r)} for v_max = {v_max})")
    if not mu > 0:
        raise UsageError(f"'mu' must be positive (got {mu})")
    spacing = (r[-1] - r[0]) / (len(r) - 1)
    # Points from linspace or arange are equidistant to rounding; a table rounded to 1e-6 of a step is not refused.
    if not (r[0] > 0 and spacing > 0 and np.all(np.abs(np.diff(r) - spacing) < 1e-6 * spacing)):
        raise UsageError("'r' must be positive, rising and equidistant")
    factor = ROTATION_FACTOR / mu
    apart = np.arange(len(r))
    row = np.where(apart % 2, -2.0, 2.0) / np.maximum(apart, 1) ** 2
    row[0] = np.pi**2 / 3
    hamiltonian = factor / spacing**2 * row[np.abs(apart[:, None] - apart)] + np.diag(energy)
    return r, hamiltonian, factor / r**2


def _check_states(r: np.ndarray, states: np.ndarray) -> None:
    """Refuse states, shape (n, n_v), that reach an end of the grid or that it is too coarse for.

    A state that fails in one way often fails in the other as well; the larger amplitude says which comes first.
    """
    signs = np.where(np.arange(len(r)) % 2, -1.0, 1.0)
    amplitudes = np.abs([states[0], states[-1], signs @ states / np.sqrt(len(r))])
    if amplitudes.max() <= _LOOSE_END:
        return
    v = int(np.argmax(amplitudes.max(axis=0) > _LOOSE_END))
    worst = int(np.argmax(amplitudes[:, v]))
    if worst == 2:
        message = f"the grid is too coarse for v = {v}; use more points"
    else:
        message = (
            f"the wavefunction of v = {v} has not died away at r = {r[-worst]:g} A; extend the grid there, "
            "or ask for fewer levels if this one is not bound"
        )
    raise NotConverged(message, state={"v": v, "amplitude": float(amplitudes[worst, v])})
