"""Relations between constants: what is refused, and the map that they make."""

from __future__ import annotations

import numpy as np
import pytest
from related_lines import NAMES, TRUTH, model_of, noisy_lines

from dunhamfit.errors import UsageError
from dunhamfit.fit.model import Prior
from dunhamfit.inference.relations import Relations

# A. Kratzer, Z. Phys. 3, 289 (1920): D_e = 4 B_e^3/omega_e^2, in the signs of Dunham's Y_02 = -D_e.
KRATZER = {"Y02": "-4*Y01**3/Y10**2"}


@pytest.fixture(scope="module")
def lines():
    return noisy_lines(j_max=5)


@pytest.mark.parametrize(
    ("relations", "fixed", "message"),
    [
        (
            {"Y02": "2*Y11", "Y11": "Y02/2"},
            {},
            "the relations of Y02, Y11 go round in a circle; give one of them another",
        ),
        ({"Y02": "Y02 + 1"}, {}, "the relations of Y02 go round in a circle; give one of them another"),
        (
            {"Y03": "Y02**2"},
            {},
            "relation for 'Y03': it is not a constant of the model (Y10, Y20, Y01, Y11, Y02)",
        ),
        (
            {"Y02": "Y05 * 2"},
            {},
            "relation 'Y05 * 2': Y05 is not in the model; it has Y01, Y02, Y10, Y11, Y20",
        ),
        (KRATZER, {"Y02": 0.0}, "'Y02' has both a relation and a fixed value or prior; keep one"),
        (KRATZER, {"Y02": 1e-9}, "'Y02' has both a relation and a fixed value or prior; keep one"),
    ],
)
def test_what_is_refused(lines, relations, fixed, message):
    model = model_of(lines, priors={name: Prior(-2.5e-7, sigma) for name, sigma in fixed.items()})
    with pytest.raises(UsageError) as caught:
        Relations(model, relations)
    assert str(caught.value) == message


def test_a_relation_may_use_related_and_fixed_constants_in_any_order(lines):
    model = model_of(lines, priors={"Y20": Prior(-2.75, 0.0)})
    relations = Relations(model, {"Y11": "1e3*Y02*Y20", "Y02": "-4*Y01**3/Y10**2"})
    assert relations.names == ("Y10", "Y01")
    found = dict(zip(NAMES, relations.values(np.array([701.25, 0.3125])), strict=True))
    assert found["Y02"] == -4 * 0.3125**3 / 701.25**2
    assert found["Y11"] == 1e3 * found["Y02"] * -2.75
    assert found["Y20"] == -2.75
    assert relations.origins == {"Y02": "relation -4*Y01**3/Y10**2", "Y11": "relation 1e3*Y02*Y20"}


def test_the_jacobian_is_that_of_the_map(lines):
    relations = Relations(model_of(lines), {"Y11": "-6*Y01**2/Y10*sqrt(abs(Y20)/3)", **KRATZER})
    free = relations.start(TRUTH)
    jacobian = relations.jacobian(free)
    for place, value in enumerate(free):
        step = np.zeros_like(free)
        step[place] = 1e-5 * abs(value)
        numerical = (relations.values(free + step) - relations.values(free - step)) / (2 * step[place])
        # Central differences of relative step 1e-5: truncation 1e-10, rounding 1e-11, of the largest in a row.
        assert np.allclose(jacobian[:, place], numerical, rtol=1e-8, atol=0)


def test_lmfit_holds_the_same_map(lines):
    """lmfit has an expression language of its own; what is allowed here must mean the same there."""
    relations = Relations(model_of(lines), {"Y11": "-sqrt(Y01**4)*exp(log(6))/Y10 + 2**-9", **KRATZER})
    free = relations.start(TRUTH)
    limits = np.tile([-np.inf, np.inf], (len(free), 1))
    parameters = relations.parameters(free, np.ones(len(free)), limits)
    assert np.allclose(relations.read(parameters), relations.values(free), rtol=1e-14, atol=0)


def test_the_deepest_relation_that_is_read_can_be_fitted(lines):
    relations = Relations(model_of(lines), {"Y02": "-" * 58 + "Y11"})
    free = relations.start(TRUTH)
    limits = np.tile([-np.inf, np.inf], (len(free), 1))
    parameters = relations.parameters(free, np.ones(len(free)), limits)
    assert relations.read(parameters)[NAMES.index("Y02")] == TRUTH[NAMES.index("Y11")]
