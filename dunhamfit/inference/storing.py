"""A posterior as arrays and texts by name, and back, so that any store can hold it."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from dunhamfit.inference.chain_state import ChainState
from dunhamfit.inference.posterior import Posterior, Quantity

# Of the arrays that carry a unit; the units of the quantities are listed under "units".
ARRAY_UNITS = {"chain": "as listed", "fitted": "as listed", "sigma": "as listed"}


def pack(posterior: Posterior) -> dict[str, object]:
    """Arrays, texts and tuples of texts from which `unpack` makes the same posterior, bit for bit.

    Parameters
    ----------
    posterior : Posterior
    """
    state = posterior.state
    packed = {
        "error_model": posterior.error_model,
        "names": posterior.names,
        "kinds": tuple(item.kind for item in posterior.quantities),
        "units": tuple(item.unit for item in posterior.quantities),
        "fitted": np.array([item.fitted for item in posterior.quantities]),
        "sigma": np.array([item.sigma for item in posterior.quantities]),
        "chain": posterior.chain,
        "coords": state.coords,
        "log_prob": state.log_prob,
        "random_keys": state.random_keys,
        "random_position": state.random_position,
        "random_spare": state.random_spare,
        "seed": np.array(posterior.seed, dtype=np.int64),
        "warm_up": np.array(posterior.warm_up, dtype=np.int64),
        "accepted": posterior.accepted,
        "identity_of": tuple(posterior.identity),
        "identity": tuple(posterior.identity.values()),
        "factor_range": np.array(posterior.factor_range),
        "priors": posterior.priors,
        "notes": posterior.notes,
        "exact": np.array(posterior.exact),
        "forced": np.array(posterior.forced),
        "interrupted": np.array(posterior.interrupted),
    }
    if posterior.bad_probability is not None:
        packed["bad_probability"] = posterior.bad_probability
    return packed


def unpack(packed: Mapping[str, object]) -> Posterior:
    """The posterior that was packed."""
    return Posterior(
        error_model=str(packed["error_model"]),
        quantities=tuple(
            Quantity(str(name), str(kind), str(unit), float(fitted), float(sigma))
            for name, kind, unit, fitted, sigma in zip(
                packed["names"], packed["kinds"], packed["units"], packed["fitted"], packed["sigma"], strict=True
            )
        ),
        chain=np.array(packed["chain"], dtype=float),
        state=ChainState(
            coords=np.array(packed["coords"], dtype=float),
            log_prob=np.array(packed["log_prob"], dtype=float),
            random_keys=np.array(packed["random_keys"]).astype(np.uint32),
            random_position=np.array(packed["random_position"], dtype=np.int64),
            random_spare=np.array(packed["random_spare"], dtype=float),
        ),
        seed=int(packed["seed"]),
        warm_up=int(packed["warm_up"]),
        accepted=np.array(packed["accepted"], dtype=np.int64),
        identity=dict(zip(packed["identity_of"], packed["identity"], strict=True)),
        factor_range=tuple(map(float, packed["factor_range"])),
        priors=tuple(map(str, packed["priors"])),
        notes=tuple(map(str, packed["notes"])),
        exact=bool(packed["exact"]),
        forced=bool(packed["forced"]),
        interrupted=bool(packed["interrupted"]),
        bad_probability=np.array(packed["bad_probability"]) if "bad_probability" in packed else None,
    )
