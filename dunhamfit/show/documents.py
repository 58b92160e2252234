"""JSON documents of results: plain dictionaries, numbers at full precision."""

from __future__ import annotations

from dataclasses import asdict

import numpy as np

from dunhamfit.fit.record import Fit
from dunhamfit.fit.summary import summarise_bands, summarise_sources


def fit_document(
    fit: Fit, *, run: int | None = None, parent: int | None = None, notices: tuple[str, ...] = ()
) -> dict[str, object]:
    """The document that `fit --json` prints.

    Parameters
    ----------
    fit : Fit
    run, parent : int, optional
        Numbers of the run and of the one before it, where the fit is in an archive.
    notices : tuple of str
        What was said while reading; they join the warnings.
    """
    lines, stats, noise = fit.lines, fit.statistics, fit.noise
    bands = summarise_bands(fit)
    return {
        "format": "dunhamfit-fit/1",
        "isotopologue": fit.model.reference.name,
        "run": run,
        "parent": parent,
        "counts": {
            "lines": len(lines),
            "used": stats.lines,
            "excluded": len(lines) - stats.lines,
            "sources": len(lines.sources),
            "bands": len({(b.v_upper, b.v_lower) for b in bands if b.used}),
            "isotopologues": len({b.isotopologue for b in bands if b.used}),
        },
        "statistics": {
            "parameters": stats.parameters,
            "dof": stats.dof,
            "chi2": stats.chi2,
            "reduced_chi2": stats.reduced_chi2,
            "condition": stats.condition,
            "log_likelihood": stats.log_likelihood,
            "aicc": stats.aicc,
            "bic": stats.bic,
        },
        "error_policy": fit.noise.policy,
        "robust": fit.robust,
        "constants": [
            {
                "name": item.name,
                "kind": item.kind,
                "k": item.k,
                "l": item.l,
                "atom": item.atom or None,
                "value": float(fit.values[index]),
                "sigma": float(fit.sigmas[index]),
                "unit": item.unit,
                "fixed": bool(fit.sigmas[index] == 0.0),
            }
            for index, item in enumerate(fit.constants)
        ],
        "covariance": fit.covariance.tolist(),
        "calibration": _calibration(fit),
        "sources": [asdict(item) for item in summarise_sources(fit)],
        "bands": [asdict(item) for item in bands],
        "noise_factors": [
            {
                "name": name,
                "factor": float(factor),
                "sigma": float(sigma),
                "degrees": float(degrees),
                "determined": bool(known),
            }
            for name, factor, sigma, degrees, known in zip(
                noise.names, noise.factors, noise.sigmas, noise.degrees, noise.determined, strict=True
            )
        ],
        "excluded": [
            {
                "source": lines.sources[lines.source[i]].name,
                "row": int(lines.row[i]),
                "reason": lines.reasons[lines.exclusion[i]],
            }
            for i in np.flatnonzero(~lines.used)
        ],
        "warnings": [*notices, *fit.warnings],
    }


def _calibration(fit: Fit) -> list[dict[str, object]]:
    found = []
    for index in range(len(fit.constants), len(fit.values)):
        item = fit.model.parameters[index]
        prior = fit.model.prior(item)
        found.append(
            {
                "source": item.source,
                "kind": item.kind,
                "value": float(fit.values[index]),
                "sigma": float(fit.sigmas[index]),
                "unit": item.unit,
                "prior_sigma": None if prior is None else prior.sigma,
            }
        )
    return found
