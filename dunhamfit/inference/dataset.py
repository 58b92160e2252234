"""A posterior as an xarray Dataset, the form that ArviZ takes. Needs xarray, which comes with ArviZ."""

from __future__ import annotations

import numpy as np
import xarray

from dunhamfit.inference.posterior import Posterior


def to_dataset(posterior: Posterior) -> xarray.Dataset:
    """Draws of every quantity along the dimensions `chain` and `draw`.

    A chain is one independently seeded ensemble, so that what is compared between chains is
    independent. Its walkers follow each other along `draw`, each with its steps in order,
    so that the autocorrelation along `draw` is that of a walker.

    Parameters
    ----------
    posterior : Posterior

    Returns
    -------
    xarray.Dataset
        Units, error model, seed, priors and notes are attributes.
    """
    steps, ensembles, walkers, count = posterior.kept.shape
    ordered = np.transpose(posterior.kept, (1, 2, 0, 3)).reshape(ensembles, walkers * steps, count)
    variables = {
        item.name: (("chain", "draw"), ordered[..., place], {"units": item.unit, "kind": item.kind})
        for place, item in enumerate(posterior.quantities)
    }
    return xarray.Dataset(
        variables,
        coords={"chain": np.arange(ensembles), "draw": np.arange(walkers * steps)},
        attrs={
            "inference_library": "emcee",
            "error_model": posterior.error_model,
            "seed": posterior.seed,
            "priors": "; ".join(posterior.priors),
            "notes": "; ".join(posterior.notes),
            "stamp": posterior.stamp,
        },
    )
