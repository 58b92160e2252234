"""Constants tied to others by relations: which are free, and how all follow from them."""

from __future__ import annotations

from collections.abc import Mapping

import lmfit
import numpy as np

from dunhamfit.errors import UsageError
from dunhamfit.fit.model import Model
from dunhamfit.inference.expression import Dual, Expression, parse_expression


class Relations:
    """The map from free parameters to all parameters of a model in which relations hold.

    Attributes
    ----------
    model : Model
    names : tuple of str
        Free parameters, in the model's order.
    origins : mapping from the name of a constant to text
    """

    def __init__(self, model: Model, relations: Mapping[str, str]):
        words = {item.name: identifier(item.name) for item in model.parameters}
        constants = [words[item.name] for item in model.constants]
        places = {words[item.name]: i for i, item in enumerate(model.parameters)}
        wanted = {identifier(name): text for name, text in relations.items()}
        for name in wanted:
            if name not in constants:
                raise UsageError(f"relation for '{name}': it is not a constant of the model ({', '.join(constants)})")
            if model.prior(model.parameters[places[name]]) is not None:
                raise UsageError(f"'{name}' has both a relation and a fixed value or prior; keep one")
        parsed = {name: parse_expression(text.replace(",", "_"), names=constants) for name, text in wanted.items()}
        self.model = model
        self._ordered = _in_order(parsed)
        self._places = places
        self._free = [i for i, item in enumerate(model.parameters) if words[item.name] not in parsed]
        self._free = [i for i in self._free if not model.fixed[i]]
        self._words = list(places)
        self.names = tuple(model.parameters[i].name for i in self._free)
        self.related = tuple(places[name] for name in self._ordered)
        self.origins = {model.parameters[places[n]].name: f"relation {e.text}" for n, e in self._ordered.items()}

    def start(self, values: np.ndarray) -> np.ndarray:
        """Free parameters out of all, shape (q,)."""
        return values[self._free]

    def values(self, free: np.ndarray) -> np.ndarray:
        """All parameters, shape (p,)."""
        return self._evaluate(free)[0]

    def jacobian(self, free: np.ndarray) -> np.ndarray:
        """Derivatives of all parameters with respect to the free ones, shape (p, q)."""
        return self._evaluate(free)[1]

    def parameters(self, start: np.ndarray, scale: np.ndarray, limits: np.ndarray) -> lmfit.Parameters:
        """lmfit's parameters: free steps in units of `scale`, and every constant as an expression of them."""
        found = lmfit.Parameters()
        base = self.values(start)
        for place, (index, low, high) in enumerate(zip(self._free, *limits.T, strict=True)):
            found.add(step_name(place), value=0.0, min=low, max=high)
            here, unit = float(start[place]), float(scale[place])
            found.add(self._words[index], expr=f"{here!r} + {unit!r} * {step_name(place)}")
        for index, word in enumerate(self._words):
            if word not in found and word not in self._ordered:
                found.add(word, value=float(base[index]), vary=False)
        for name, expression in self._ordered.items():
            found.add(name, expr=expression.text)
        return found

    def read(self, parameters: lmfit.Parameters) -> np.ndarray:
        """All parameters as lmfit has them, shape (p,)."""
        return np.array([parameters[word].value for word in self._words])

    def _evaluate(self, free: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        count = len(self._places)
        values, jacobian = np.zeros(count), np.zeros((count, len(free)))
        for i, item in enumerate(self.model.parameters):
            if self.model.fixed[i]:
                values[i] = self.model.prior(item).value
        values[self._free] = free
        jacobian[self._free, np.arange(len(free))] = 1.0
        known = {word: Dual(values[i], jacobian[i]) for word, i in self._places.items()}
        for name, expression in self._ordered.items():
            result = expression.evaluate(known)
            known[name] = result
            values[self._places[name]], jacobian[self._places[name]] = result.value, result.gradient
        return values, jacobian


def identifier(name: str) -> str:
    """The name of a parameter as a word of an expression: `Y10,0` becomes `Y10_0`."""
    return "".join(letter if letter.isalnum() else "_" for letter in name)


def step_name(place: int) -> str:
    """Name of a free step among lmfit's parameters."""
    return f"step_{place}"


def _in_order(parsed: dict[str, Expression]) -> dict[str, Expression]:
    """Relations so that each stands after those it uses.

    Raises
    ------
    UsageError
        If they go round in a circle.
    """
    ordered: dict[str, Expression] = {}
    while len(ordered) < len(parsed):
        ready = [n for n, e in parsed.items() if n not in ordered and not (e.names & set(parsed)) - set(ordered)]
        if not ready:
            rest = sorted(set(parsed) - set(ordered))
            raise UsageError(f"the relations of {', '.join(rest)} go round in a circle; give one of them another")
        ordered.update({name: parsed[name] for name in ready})
    return ordered
