"""What is sampled, under which priors, and what a reader must know of it, in words."""

from __future__ import annotations

import numpy as np

from dunhamfit.fit.record import Fit
from dunhamfit.inference.error_models import LineErrors
from dunhamfit.inference.frame import Frame
from dunhamfit.inference.posterior import Quantity

# With fewer degrees of freedom the wings of the posterior are so long that its variance means little.
_FEW_DEGREES = 5.0


def quantities(frame: Frame, errors: LineErrors | None) -> tuple[Quantity, ...]:
    """Everything that is sampled, in the order of the sampler's coordinates."""
    sigmas = np.sqrt(np.einsum("ij,ij->i", frame.factor, frame.factor))
    parameters = tuple(
        Quantity(item.name, item.kind, item.unit, float(value), float(sigma))
        for item, value, sigma in zip(frame.parameters, frame.values, sigmas, strict=True)
    )
    factors = tuple(
        Quantity(f"factor[{name}]", "noise factor", "1", float(value), float(sigma))
        for name, value, sigma in zip(frame.noise_names, frame.noise_factors, frame.noise_sigmas, strict=True)
    )
    own = tuple(Quantity(name, "error model", "1") for name in errors.names) if errors else ()
    return parameters + factors + own


def priors(fit: Fit, frame: Frame, errors: LineErrors | None, factor_range: tuple[float, float]) -> tuple[str, ...]:
    """The prior of everything that is sampled."""
    texts, free = [], []
    for item in frame.parameters:
        prior = fit.model.prior(item)
        if prior is None:
            free.append(item.name)
        else:
            unit = f" {item.unit}" if item.unit != "1" else ""
            texts.append(f"{item.name}: Gaussian, {prior.value:.6g} +- {prior.sigma:.6g}{unit}")
    if free:
        texts.insert(0, f"{', '.join(free)}: uniform without bounds")
    if frame.factors:
        low, high = factor_range
        texts.append(f"noise factors: ln f uniform, f between {low:g} and {high:g}")
    if errors:
        texts.append(errors.prior)
    return tuple(texts)


def notes(fit: Fit, frame: Frame, *, exact: bool) -> tuple[str, ...]:
    """What is held, and what the result leaves out."""
    texts = []
    if exact:
        texts.append(
            "Gaussian errors with known uncertainties leave nothing non-Gaussian: the analytic posterior of the fit "
            "is exact. Mean, sd and quantiles are its own, and the draws come from it directly, without a chain"
        )
    fixed = [item.name for item, given in zip(fit.model.parameters, fit.model.fixed, strict=True) if given]
    if fixed:
        texts.append(f"held at the value given: {', '.join(fixed)}")
    held = [name for name, known in zip(fit.noise.names, fit.noise.determined, strict=True) if not known]
    if held:
        texts.append(f"noise factor held, too few lines to tell it: {', '.join(held)}")
    few = [name for name, degrees in zip(frame.noise_names, frame.noise_degrees, strict=True) if degrees < _FEW_DEGREES]
    if few:
        texts.append(
            f"fewer than {_FEW_DEGREES:.0f} degrees of freedom tell the noise factor of {', '.join(few)}: its "
            "posterior has long wings, and quantiles say more than the sd"
        )
    return tuple(texts)
