"""One entry to every kind of fit: plain, with relations or bounds, or through a potential."""

from __future__ import annotations

import importlib
from collections.abc import Mapping
from dataclasses import dataclass, field
from types import MappingProxyType

from dunhamfit.errors import UsageError
from dunhamfit.fit.model import Model
from dunhamfit.fit.record import Fit
from dunhamfit.fit.solve import fit_model
from dunhamfit.inference.origins import with_origins
from dunhamfit.lines.line_list import LineList


@dataclass(frozen=True)
class Route:
    """What a model alone does not say of how its parameters are found.

    Attributes
    ----------
    relations : mapping from the name of a constant to an expression
    bounds : mapping from the name of a constant to (lowest, highest), cm-1
    potential : int
        Highest a_N of a potential-consistent fit; 0 for none.
    """

    relations: Mapping[str, str] = field(default_factory=lambda: MappingProxyType({}))
    bounds: Mapping[str, tuple[float, float]] = field(default_factory=lambda: MappingProxyType({}))
    potential: int = 0

    @property
    def plain(self) -> bool:
        """Whether the fit is linear."""
        return not (self.relations or self.bounds or self.potential)


def fit_route(model: Model, lines: LineList, route: Route, *, policy: str = "stated", robust: str = "none") -> Fit:
    """Fit a model by a route; raises what the fit of that route raises.

    Raises
    ------
    UsageError
        For a combination that is not meaningful.
    """
    if route.plain:
        return with_origins(fit_model(model, lines, policy=policy, robust=robust))
    if robust != "none":
        raise UsageError(f"robust = '{robust}' goes with plain linear fits; leave relations, bounds and potential out")
    if route.potential and route.relations:
        raise UsageError("[model] potential and relations exclude each other: every term follows from the potential")
    # lmfit takes a second or two to load, which a plain fit shall not wait for.
    constrained = importlib.import_module("dunhamfit.inference.constrained")
    constraint = constrained.make_constraint(model, route.relations, route.potential)
    return constrained.fit_constrained(model, lines, constraint, policy=policy, bounds=route.bounds)
