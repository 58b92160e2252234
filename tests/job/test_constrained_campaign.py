"""Relations, bounds, priors and a potential asked for in a job file: fitted, stored and verified.

The campaign of the package is invented and its truth is known: Y21 = 8e-4 Y11 holds in it.
"""

from __future__ import annotations

import json
import shutil
from importlib.resources import files
from pathlib import Path

import numpy as np
import pytest

from dunhamfit.cli.main import main
from dunhamfit.errors import UsageError
from dunhamfit.job.run import fit_job
from dunhamfit.job.tables import read_job

TERMS = "terms = [4, 3, 2, 1]"
REQUESTS = {
    "relation": 'relations = { Y21 = "8e-4*Y11" }',
    "kratzer": 'relations = { Y02 = "-4*Y01**3/Y10**2" }',
    "prior": 'fixed = { Y13 = { value = -1e-15, sigma = 1e-16, from = "an invented calculation" } }',
    "bound": "bounds = { Y22 = [-1e-12, 1e-12] }",
    "potential": "potential = 6",
}


@pytest.fixture
def job(tmp_path):
    """A function that writes the campaign's job with more in its model."""
    for source in (Path(str(files("dunhamfit"))) / "examples" / "campaign").iterdir():
        shutil.copy(source, tmp_path)

    def write(*requests: str, robust: str = "none") -> Path:
        path = tmp_path / "sis.toml"
        text = path.read_text(encoding="utf-8")
        assert TERMS in text and 'robust = "none"' in text
        text = text.replace(TERMS, "\n".join([TERMS, *requests])).replace('robust = "none"', f'robust = "{robust}"')
        path.write_text(text, encoding="utf-8")
        return path

    return write


@pytest.mark.parametrize("request_", REQUESTS.values(), ids=REQUESTS)
def test_a_run_is_repeated_from_its_archive(job, capsys, request_):
    path = job(request_)
    assert main(["fit", str(path), "--quiet"]) == 0
    capsys.readouterr()
    assert main(["verify", str(path.with_suffix(".h5")), "--json"]) == 0
    (run,) = json.loads(capsys.readouterr().out)["runs"]
    # 1e-10 is the bar for a repeat.
    assert run["agrees"] is True and run["difference"] <= 1e-10


def test_a_true_relation_sharpens_the_constants_and_keeps_them_true(job):
    path = job()
    truth = json.loads((path.parent / "truth.json").read_text(encoding="utf-8"))
    plain = fit_job(read_job(path))
    fit = fit_job(read_job(job(REQUESTS["relation"])))
    assert fit.value(2, 1) == 8e-4 * fit.value(1, 1)
    assert fit.sigma(2, 1) == pytest.approx(8e-4 * fit.sigma(1, 1), rel=1e-12)
    assert fit.sigma(2, 1) < plain.sigma(2, 1) / 2
    names = list(truth["terms"])
    places = [fit.model.names.index(name) for name in names]
    pull = (fit.values[places] - [truth["terms"][name] for name in names]) / fit.sigmas[places]
    # Known misfit lines are among these; 13 correlated pulls beyond 4.5 have a chance of 1e-4.
    assert np.max(np.abs(pull)) < 4.5
    # Factors of sources hardly change, as the relation is true.
    assert fit.noise.names == plain.noise.names
    assert np.allclose(fit.noise.factors, plain.noise.factors, rtol=0.01)


def test_a_noise_factor_makes_each_source_as_wide_as_it_scatters(job):
    """At the restricted-likelihood estimate chi-square of a source is its lines less the parameters it determines.

    H. D. Patterson and R. Thompson, Biometrika 58, 545 (1971): of a set of lines of one factor, sum of h with
    h = d C d^T / sigma^2 for each line, C the covariance of the parameters.
    """
    fit = fit_job(read_job(job(REQUESTS["relation"])))
    for place, factor in enumerate(fit.noise.factors):
        mine = [t for t, label in zip(fit.triangles, fit.noise.label, strict=False) if label == place]
        chi2 = sum(t.chi2(fit.values) for t in mine) / factor**2
        determined = sum(np.trace(t.r @ fit.parameter_covariance @ t.r.T) for t in mine) / factor**2
        lines = sum(t.n for t in mine)
        # C holds what is not known of the factors as well, some 1e-3 of itself.
        assert chi2 == pytest.approx(lines - determined, abs=0.05)


@pytest.mark.parametrize(
    ("requests", "robust", "message"),
    [
        (["kratzer", "potential"], "none", "[model] potential and relations exclude each other: every term follows"),
        (["kratzer"], "student", "goes with plain linear fits; leave relations, bounds and potential out"),
        (["bound"], "student", "goes with plain linear fits; leave relations, bounds and potential out"),
        (["prior", "potential"], "none", "Y13: every term follows from the potential; none can be fixed as well"),
    ],
)
def test_combinations_that_mean_nothing_are_refused(job, requests, robust, message):
    with pytest.raises(UsageError) as caught:
        fit_job(read_job(job(*(REQUESTS[name] for name in requests), robust=robust)))
    assert message in str(caught.value)


def test_an_active_bound_is_a_warning_of_the_run(job, capsys):
    path = job(REQUESTS["bound"])
    assert main(["fit", str(path), "--json", "--quiet"]) == 0
    said = " ".join(json.dumps(json.loads(capsys.readouterr().out)).split())
    assert "Y22 stands at a bound of [-1e-12, 1e-12] cm-1: its sigma is shown as 0" in said
