"""What a sigma contains, in words: printed under every table, stored with every run."""

from __future__ import annotations

import math

from scipy.special import stdtrit

from dunhamfit.fit.record import Fit
from dunhamfit.inference.degrees import effective_degrees
from dunhamfit.inference.weighted import is_tied

_FACTORS = {
    "stated": "the stated uncertainties of the lines as they stand",
    "common": "the stated uncertainties of the lines times one common noise factor",
    "per-source": "the stated uncertainties of the lines times one noise factor for each source",
    "per-band": "the stated uncertainties of the lines times one noise factor for each band",
}
# One standard deviation of a normal distribution on both sides.
_COVERAGE = math.erf(1 / math.sqrt(2))
# Student's factor differs from 1 by less than one percent from here on.
_LARGE_DOF = 50


def policy_words(fit: Fit) -> str:
    """One sentence or two: contents, coverage and degrees of freedom of the sigmas of `fit`."""
    parts = [_FACTORS[fit.noise.policy]]
    shared = [
        f"{item.kind} of {item.source} ({_prior_words(fit, item)})" for item in fit.model.parameters if item.source
    ]
    if shared:
        parts.append(f"the shared {', '.join(shared)}")
    else:
        parts.append("no shared calibration error")
    text = f"sigma is 1 standard uncertainty (k = 1, {100 * _COVERAGE:.1f} %). It contains {' and '.join(parts)}."
    if fit.robust != "none":
        text += f" Lines are weighted by the robust loss '{fit.robust}', and sigma is that of its sandwich covariance."
    dof = fit.statistics.dof
    text += f" Degrees of freedom: {dof}"
    fewest = dof if is_tied(fit) else float(effective_degrees(fit)[: len(fit.constants)].min())
    if fit.noise.policy != "stated" and 0 < fewest < _LARGE_DOF:
        factor = float(stdtrit(fewest, 0.5 + _COVERAGE / 2))
        text += (
            f"; the noise factors rest on as few as {fewest:.0f} for one constant: multiply sigma by Student's factor, "
            f"there {factor:.3f}, for {100 * _COVERAGE:.1f} %"
        )
    return text + "."


def _prior_words(fit: Fit, parameter) -> str:
    prior = fit.model.prior(parameter)
    if prior is None:
        return "free"
    return f"prior sigma {prior.sigma:.3g}{'' if parameter.unit == '1' else ' ' + parameter.unit}"
