"""What is handed to other libraries."""

from __future__ import annotations

import numpy as np
import pytest
from simulated_campaign import TERMS, campaign, fitted

from dunhamfit.fit.model import Prior
from dunhamfit.fit.solve import fit_lines
from dunhamfit.inference.handover import to_lmfit
from dunhamfit.inference.sampling import sample


@pytest.fixture(scope="module")
def lines():
    return campaign(np.random.default_rng(3), "gaussian")[0]


def test_lmfit_parameters_have_the_numbers_of_the_fit(lines):
    fit = fit_lines(lines, TERMS, reference="28Si32S", priors={"Y20": Prior(-2.75, 0.0)})
    parameters = to_lmfit(fit)
    assert list(parameters) == ["Y10", "Y20", "Y01", "Y11", "offset_oven"]
    assert parameters["offset_oven"].user_data == "offset[oven]"
    assert not parameters["Y20"].vary and parameters["Y20"].stderr is None
    assert parameters["Y01"].value == fit.value(0, 1) and parameters["Y01"].stderr == fit.sigma(0, 1)
    place = [fit.index(1, 0), fit.index(1, 1)]
    block = fit.covariance[np.ix_(place, place)]
    expected = block[0, 1] / np.sqrt(block[0, 0] * block[1, 1])
    assert parameters["Y10"].correl["Y11"] == pytest.approx(expected, rel=1e-12)
    assert parameters.covar.shape == (4, 4)


def test_dataset_puts_ensembles_along_chain(lines):
    pytest.importorskip("xarray", reason="xarray comes with ArviZ, which is optional")
    from dunhamfit.inference.dataset import to_dataset  # needs xarray

    posterior = sample(fitted(lines), seed=1, total=64 * 5)
    dataset = to_dataset(posterior)
    assert dict(dataset.sizes) == {"chain": 4, "draw": 16 * 5}
    assert set(dataset.data_vars) == set(posterior.names)
    assert dataset["Y10"].attrs["units"] == "cm-1"
    place = posterior.index("Y10")
    # The steps of the second walker of the third ensemble.
    assert np.array_equal(dataset["Y10"].values[2, 5:10], posterior.chain[:, 2, 1, place])
