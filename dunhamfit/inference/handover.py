"""A fit as parameters of lmfit, for whoever goes on with that library."""

from __future__ import annotations

import re

import lmfit
import numpy as np

from dunhamfit.fit.record import Fit


def to_lmfit(fit: Fit) -> lmfit.Parameters:
    """Values, standard uncertainties and correlations of all parameters of a fit.

    lmfit wants names that are Python identifiers: what is not a letter, digit or underscore
    becomes an underscore, so that `offset[furnace]` is called `offset_furnace`. The name in the
    fit is the parameter's `user_data`.

    Parameters
    ----------
    fit : Fit

    Returns
    -------
    lmfit.Parameters
        `vary` is false for parameters that the fit held fixed.
    """
    names = _identifiers(fit.model.names)
    covariance = fit.parameter_covariance
    varied = np.flatnonzero(~fit.model.fixed)
    parameters = lmfit.Parameters()
    for place, name in enumerate(names):
        parameters.add(name, value=float(fit.values[place]), vary=bool(place in varied))
        parameters[name].user_data = fit.model.names[place]
    for place in varied:
        parameters[names[place]].stderr = float(fit.sigmas[place])
        parameters[names[place]].correl = {
            names[other]: float(covariance[place, other] / (fit.sigmas[place] * fit.sigmas[other]))
            for other in varied
            if other != place
        }
    parameters.covar = covariance[np.ix_(varied, varied)]
    return parameters


def _identifiers(names: tuple[str, ...]) -> list[str]:
    """One identifier for each name, no two alike."""
    taken: list[str] = []
    for name in names:
        plain = re.sub(r"\W+", "_", name, flags=re.ASCII).strip("_")
        candidate, number = plain, 2
        while candidate in taken:
            candidate, number = f"{plain}_{number}", number + 1
        taken.append(candidate)
    return taken
