r"""Classical turning points from the vibrational energies and rotational constants (Rydberg, Klein, Rees).

With C = h/(8 pi^2 c mu) = ROTATION_FACTOR/mu,

    f(v) = sqrt(C) int dv' / sqrt(G(v) - G(v'))          = (r_max - r_min)/2
    g(v) = 1/sqrt(C) int B(v') dv' / sqrt(G(v) - G(v'))  = (1/r_min - 1/r_max)/2

from v_min to v, so that r = sqrt(f^2 + f/g) -+ f (A. L. G. Rees, Proc. Phys. Soc. 59, 998 (1947)). v_min is
where the energy above the minimum of the potential is zero: -1/2 to first order, or the root of
G(v) + Y_00 = 0 (E. W. Kaiser, J. Chem. Phys. 53, 1686 (1970); from memory).

The substitution v' = v - (v - v_min) t^2 makes both integrands smooth,

    int F(v') dv' / sqrt(G(v) - G(v')) = 2 sqrt(v - v_min) int_0^1 F / sqrt(q) dt,   q = (G(v) - G(v'))/(v - v'),

with integrands even in t: the positive half of a Gauss-Legendre rule on (-1, 1) serves, the same as
Gauss-Jacobi for the weight (v - v')^(-1/2). Rules of doubled length are used until two of them agree.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.polynomial import Polynomial
from numpy.polynomial.polynomial import polyval

from dunhamfit.errors import NotConverged, UsageError
from dunhamfit.molecule.potential import ROTATION_FACTOR

# Relative change between two rules below which the longer one is taken. The rules gain so fast that the
# longer one is far better than this; rounding in a G(v) that cancels can come near 1e-11.
_AGREEMENT = 1e-10
_RULES = (12, 24, 48, 96, 192)


@dataclass(frozen=True, eq=False)
class TurningPoints:
    """Classical turning points of n levels, in the order asked for.

    Attributes
    ----------
    v : ndarray of float, shape (n,)
        May be fractional.
    energy : ndarray of float, shape (n,), cm-1
        Above the minimum of the potential.
    r_min, r_max : ndarray of float, shape (n,), A
    r_e : float, A
        Where the two meet.
    v_min : float
        Lower limit of the integrals.
    covariance : ndarray of float, shape (2n, 2n), A^2, or None
        Of (r_min, r_max), where that of the constants was given. It contains neither the uncertainty
        of the masses nor that of the semiclassical method itself.
    """

    v: np.ndarray
    energy: np.ndarray
    r_min: np.ndarray
    r_max: np.ndarray
    r_e: float
    v_min: float
    covariance: np.ndarray | None = None

    @property
    def r_min_sigma(self) -> np.ndarray:
        """1 sigma of `r_min`, A; nan where no covariance was given."""
        return self._sigma()[: len(self.v)]

    @property
    def r_max_sigma(self) -> np.ndarray:
        """1 sigma of `r_max`, A; nan where no covariance was given."""
        return self._sigma()[len(self.v) :]

    def _sigma(self) -> np.ndarray:
        if self.covariance is None:
            return np.full(2 * len(self.v), np.nan)
        return np.sqrt(np.clip(np.diag(self.covariance), 0.0, None))


def turning_points(v, energy, rotation, *, mu: float, v_min: float = -0.5) -> TurningPoints:
    """Turning points from any functions G(v) and B(v).

    Parameters
    ----------
    v : array_like of float, shape (n,)
        Above `v_min`.
    energy, rotation : callable
        G and B in cm-1 for an array of v of any shape; G is zero at `v_min`.
    mu : float, u
        Reduced mass.
    v_min : float
        Lower limit of the integrals.

    Raises
    ------
    UsageError
        Where G does not rise all the way to v.
    NotConverged
        Where the integrals do not settle, as close to a dissociation limit.
    """
    v = _checked(v, v_min, mu)

    def quotient(at):
        return (np.asarray(energy(v))[:, None] - energy(at)) / (v[:, None] - at)

    f, g, _ = _integrate(v, v_min, mu, quotient, rotation)
    centre = np.sqrt(f * f + f / g)
    r_e = np.sqrt(ROTATION_FACTOR / mu / float(rotation(np.array(v_min))))
    return TurningPoints(v, np.asarray(energy(v), dtype=float), centre - f, centre + f, float(r_e), v_min)


def dunham_turning_points(
    v, vibration, rotation, *, mu: float, kaiser: bool = False, covariance=None
) -> TurningPoints:
    """Turning points from Dunham coefficients.

    Parameters
    ----------
    v : array_like of float, shape (n,)
    vibration : array_like of float, cm-1
        Y_10, Y_20, ...
    rotation : array_like of float, cm-1
        Y_01, Y_11, ...
    mu : float, u
    kaiser : bool
        Take v_min from G(v) + Y_00 = 0, with Y_00 from `y00_constant`; otherwise v_min = -1/2.
    covariance : array_like of float, cm-2, optional
        Of (Y_10, Y_20, ..., Y_01, Y_11, ...), in this order; propagated with analytic derivatives.

    Raises
    ------
    UsageError, NotConverged
        As `turning_points`.
    """
    vibration, rotation = (np.atleast_1d(np.asarray(part, dtype=float)) for part in (vibration, rotation))
    if kaiser and (vibration.size < 2 or rotation.size < 2):
        raise UsageError("the lower limit from Y_00 needs Y_10, Y_20, Y_01 and Y_11")
    y00, y00_slopes = _y00(vibration, rotation) if kaiser else (0.0, np.zeros(vibration.size + rotation.size))
    v_min = _lower_limit(y00, vibration)
    v = _checked(v, v_min, mu)

    def quotient(at):
        return np.tensordot(vibration, _monomial_quotients(v, at, vibration.size), axes=1)

    def rotate(at):
        return polyval(at + 0.5, rotation)

    f, g, rule = _integrate(v, v_min, mu, quotient, rotate)
    centre = np.sqrt(f * f + f / g)
    propagated = None
    if covariance is not None:
        covariance = np.asarray(covariance, dtype=float)
        if covariance.shape != (y00_slopes.size,) * 2:
            raise UsageError(
                f"'covariance' must have shape {(y00_slopes.size,) * 2}, one row for each constant given "
                f"(got {covariance.shape})"
            )
        f_slopes, g_slopes = _slopes(v, v_min, mu, rule, vibration, rotation, y00, y00_slopes)
        centre_slopes = ((2 * f + 1 / g) * f_slopes - f / g**2 * g_slopes) / (2 * centre)
        slopes = np.concatenate([centre_slopes - f_slopes, centre_slopes + f_slopes], axis=1)
        propagated = slopes.T @ covariance @ slopes
    energy = polyval(v + 0.5, np.concatenate([[y00], vibration]))
    r_e = float(np.sqrt(ROTATION_FACTOR / mu / rotate(v_min)))
    return TurningPoints(v, energy, centre - f, centre + f, r_e, v_min, propagated)


def _monomial_quotients(v: np.ndarray, at: np.ndarray, count: int) -> np.ndarray:
    """(x^k - x'^k)/(x - x') = x^(k-1) + x^(k-2) x' + ... for k = 1..count, without cancellation.

    x = v + 1/2 of shape (n,), x' = at + 1/2 of shape (n, nodes); result of shape (count, n, nodes).
    """
    x, found = (v + 0.5)[:, None], [np.ones_like(at)]
    for k in range(1, count):
        found.append(x**k + found[-1] * (at + 0.5))
    return np.stack(found)


def _slopes(v, v_min, mu, rule, vibration, rotation, y00, y00_slopes) -> tuple[np.ndarray, np.ndarray]:
    """Derivatives of f and of g by (Y_10, Y_20, ..., Y_01, Y_11, ...), each of shape (n_constants, n)."""
    at, weights = _nodes(v, v_min, rule)
    parts = _monomial_quotients(v, at, vibration.size)
    q, b = np.tensordot(vibration, parts, axes=1), polyval(at + 0.5, rotation)
    stretched = parts * (-0.5 * q**-1.5 * weights)
    turned = np.stack([(at + 0.5) ** k * weights / np.sqrt(q) for k in range(rotation.size)])
    f_slopes = np.concatenate([stretched.sum(axis=2), np.zeros((rotation.size, v.size))])
    g_slopes = np.concatenate([(stretched * b).sum(axis=2), turned.sum(axis=2)])
    # The lower limit moves with the constants: dv_min = -(dY_00 + dG(v_min))/G'(v_min).
    x_min, powers = v_min + 0.5, np.arange(1, vibration.size + 1)
    moved = y00_slopes + np.concatenate([x_min**powers, np.zeros(rotation.size)])
    moved = -moved / np.sum(vibration * powers * x_min ** (powers - 1))
    edge = -1.0 / np.sqrt(polyval(v + 0.5, np.concatenate([[y00], vibration])))
    f_slopes += np.outer(moved, edge)
    g_slopes += np.outer(moved, edge * polyval(x_min, rotation))
    root = np.sqrt(ROTATION_FACTOR / mu)
    return f_slopes * root, g_slopes / root


def y00_constant(y10: float, y20: float, y01: float, y11: float) -> float:
    """Y_00 in cm-1 from the four leading constants.

    Notes
    -----
    Y_00 = (B_e - omega_e x_e)/4 + alpha_e omega_e/(12 B_e) + (alpha_e omega_e)^2/(144 B_e^3): Dunham's
    Y_00 = (B_e/8)(3 a2 - 7 a1^2/4) with a1 and a2 from the leading parts of Y_11 and Y_20.
    """
    return _y00(np.array([y10, y20]), np.array([y01, y11]))[0]


def _y00(vibration: np.ndarray, rotation: np.ndarray) -> tuple[float, np.ndarray]:
    """Y_00 = (B_e a1^2 + Y_20)/4 with a1 = Y_11 Y_10/(6 B_e^2) - 1, and its derivatives by all constants."""
    (y10, y20), (y01, y11) = vibration[:2], rotation[:2]
    a1 = y11 * y10 / (6 * y01**2) - 1
    slopes = np.zeros(vibration.size + rotation.size)
    slopes[0] = a1 * y11 / (12 * y01)
    slopes[1] = 0.25
    slopes[vibration.size] = a1**2 / 4 - a1 * (a1 + 1)
    slopes[vibration.size + 1] = a1 * y10 / (12 * y01)
    return float(y01 * a1**2 + y20) / 4, slopes


def _lower_limit(y00: float, vibration: np.ndarray) -> float:
    """The root of Y_00 + Y_10 x + Y_20 x^2 + ... = 0 next to x = 0, as v = x - 1/2, by Newton's method."""
    energy = Polynomial(np.concatenate([[y00], vibration]))
    x = 0.0
    for _ in range(50):
        step = energy(x) / energy.deriv()(x)
        x -= step
        if abs(step) <= 1e-15:
            return float(x - 0.5)
    raise NotConverged("no lower limit v_min was found: Y_00 is not small beside Y_10", state={"v_min": x - 0.5})


def _checked(v, v_min: float, mu: float) -> np.ndarray:
    v = np.atleast_1d(np.asarray(v, dtype=float))
    if v.ndim != 1 or not np.all(v > v_min):
        raise UsageError(f"'v' must be a row of numbers above the lower limit {v_min:.6g} (got {v})")
    if not mu > 0:
        raise UsageError(f"'mu' must be positive (got {mu})")
    return v


@lru_cache(maxsize=len(_RULES))
def _rule(length: int) -> tuple[np.ndarray, np.ndarray]:
    nodes, weights = np.polynomial.legendre.leggauss(2 * length)
    return nodes[length:], weights[length:]


def _nodes(v: np.ndarray, v_min: float, length: int) -> tuple[np.ndarray, np.ndarray]:
    """v' and weights, both of shape (n, length), of the smooth form of the integral."""
    t, weights = _rule(length)
    width = (v - v_min)[:, None]
    return v[:, None] - width * t**2, 2 * np.sqrt(width) * weights


def _integrate(v, v_min, mu, quotient, rotation) -> tuple[np.ndarray, np.ndarray, int]:
    """f, g and the length of the rule at which both settled."""
    root, before = np.sqrt(ROTATION_FACTOR / mu), None
    for length in _RULES:
        at, weights = _nodes(v, v_min, length)
        q = quotient(at)
        falling = ~np.all(q > 0, axis=1)
        if falling.any():
            raise UsageError(
                f"G(v) must rise up to the level: it does not for v = {v[falling][0]:g}; "
                "the constants cannot be used so high"
            )
        smooth = weights / np.sqrt(q)
        now = np.stack([smooth.sum(axis=1) * root, (smooth * rotation(at)).sum(axis=1) / root])
        if before is not None and np.all(np.abs(now - before) <= _AGREEMENT * np.abs(now)):
            if not np.all(now[1] > 0):
                raise UsageError("B(v) must be positive up to the level; the constants cannot be used so high")
            return now[0], now[1], length
        before = now
    raise NotConverged(
        f"the turning points did not settle with {_RULES[-1]} nodes; G(v) is nearly flat at the highest v",
        state={"f": now[0], "g": now[1]},
    )
