"""Constants that all follow from one potential: the map from (omega_e, B_e, a_1 ... a_N) to the terms."""

from __future__ import annotations

import lmfit
import numpy as np

from dunhamfit.errors import UsageError
from dunhamfit.fit.model import Model
from dunhamfit.inference.relations import step_name
from dunhamfit.molecule.potential import dunham_coefficients, dunham_jacobian

# Orders of Dunham's relations are kept until the next would change Y10 by less than this, cm-1.
_NEGLECTED = 1e-7


class PotentialMap:
    """The map from the constants of a potential to all parameters of a model.

    Attributes
    ----------
    model : Model
    order : int
        N, the highest a_N.
    orders : int, optional
        Orders of Dunham's relations; by default as many as change Y10 by 1e-7 cm-1.
    names : tuple of str
        `omega_e`, `B_e`, `a_1` ... `a_N`, then breakdown and calibration terms.
    origins : mapping from the name of a term to text
    """

    def __init__(self, model: Model, order: int, *, orders: int | None = None):
        if order < 1:
            raise UsageError(f"[model] potential must be 1 or more, the highest a_N (got {order})")
        given = [item.name for item in model.constants if item.kind == "term" and model.prior(item) is not None]
        if given:
            raise UsageError(f"{', '.join(given)}: every term follows from the potential; none can be fixed as well")
        self.model = model
        self.order = order
        self._terms = [(term.k, term.l) for term in model.terms]
        self._own = 2 + order
        self._given_orders, self._orders = orders, orders or 2
        self._others = np.flatnonzero(~model.fixed[len(self._terms) :]) + len(self._terms)
        shape = ("omega_e", "B_e", *(f"a_{n}" for n in range(1, order + 1)))
        self.names = (*shape, *(model.names[i] for i in self._others))
        self.origins = {term.name: f"potential to a_{order}" for term in model.terms}
        self.related: tuple[int, ...] = ()

    def start(self, values: np.ndarray) -> np.ndarray:
        """Constants of a potential near to given terms, shape (q,).

        In the leading order of Dunham's relations a_(2k-1) enters Y_k1, and a_(2k-2) enters Y_k0,
        linearly and after all lower ones, so that they follow one by one; one whose term the model
        does not have starts at zero.
        """
        place = {pair: i for i, pair in enumerate(self._terms)}
        if (1, 0) not in place or (0, 1) not in place:
            raise UsageError("a potential needs the terms Y10 and Y01")
        omega_e, b_e = float(values[place[1, 0]]), float(values[place[0, 1]])
        a = np.zeros(self.order)
        for n in range(1, self.order + 1):
            pair = ((n + 1) // 2, 1) if n % 2 else ((n + 2) // 2, 0)
            if pair not in place:
                continue
            now = dunham_coefficients(omega_e, b_e, a, [pair], orders=1)[0]
            slope = dunham_jacobian(omega_e, b_e, a, [pair], orders=1)[0, 1 + n]
            a[n - 1] += (values[place[pair]] - now) / slope
        self._orders = self._given_orders or orders_needed(omega_e, b_e)
        return np.concatenate([[omega_e, b_e], a, values[self._others]])

    def values(self, free: np.ndarray) -> np.ndarray:
        """All parameters, shape (p,)."""
        omega_e, b_e, a = free[0], free[1], free[2 : self._own]
        values = np.array([0.0 if (p := self.model.prior(i)) is None else p.value for i in self.model.parameters])
        values[: len(self._terms)] = dunham_coefficients(omega_e, b_e, a, self._terms, orders=self._orders)
        values[self._others] = free[self._own :]
        return values

    def jacobian(self, free: np.ndarray) -> np.ndarray:
        """Derivatives of all parameters with respect to the free ones, shape (p, q)."""
        jacobian = np.zeros((len(self.model.parameters), len(free)))
        own = dunham_jacobian(free[0], free[1], free[2 : self._own], self._terms, orders=self._orders)
        jacobian[: len(self._terms), : self._own] = own
        jacobian[self._others, self._own + np.arange(len(self._others))] = 1.0
        return jacobian

    def parameters(self, start: np.ndarray, scale: np.ndarray, limits: np.ndarray) -> lmfit.Parameters:
        """lmfit's parameters: steps in units of `scale`."""
        self._start, self._scale = start, scale
        found = lmfit.Parameters()
        for place, (low, high) in enumerate(limits):
            found.add(step_name(place), value=0.0, min=low, max=high)
        return found

    def read(self, parameters: lmfit.Parameters) -> np.ndarray:
        """All parameters as lmfit has them, shape (p,)."""
        steps = np.array([parameters[step_name(place)].value for place in range(len(self.names))])
        return self.values(self._start + self._scale * steps)


def orders_needed(omega_e: float, b_e: float) -> int:
    """How many orders of Dunham's relations matter: each is (2 B_e/omega_e)^2 smaller than the one before."""
    orders = 1
    while omega_e * (2 * b_e / omega_e) ** (2 * orders) > _NEGLECTED and orders < 4:
        orders += 1
    return orders
