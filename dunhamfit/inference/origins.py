"""Where a value that the lines did not give comes from, in words."""

from __future__ import annotations

from dataclasses import replace
from types import MappingProxyType

from dunhamfit.fit.model import Model, Prior
from dunhamfit.fit.record import Fit


def given_origins(model: Model) -> dict[str, str]:
    """Words for every constant whose value is fixed or has a prior."""
    return {name: _words(prior) for name, prior in model.priors.items()}


def with_origins(fit: Fit) -> Fit:
    """The fit with these words."""
    if not fit.model.priors:
        return fit
    return replace(fit, origins=MappingProxyType({**given_origins(fit.model), **fit.origins}))


def _words(prior: Prior) -> str:
    words = "fixed value" if prior.sigma == 0 else f"prior of sigma {prior.sigma:.3g}"
    return f"{words} from {prior.origin}" if prior.origin else words
