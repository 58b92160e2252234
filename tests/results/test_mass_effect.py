"""The effect of the masses against fits that were made with other masses."""

from __future__ import annotations

import numpy as np
import pytest
from invented_molecule import BREAKDOWN, REFERENCE, TERMS, simulated_lines

from dunhamfit.fit.solve import fit_lines
from dunhamfit.molecule.masses import Masses
from dunhamfit.results.isotopologues import own_constants
from dunhamfit.results.mass_effect import mass_slopes


@pytest.fixture(scope="module")
def lines():
    return simulated_lines(seed=4)


def refitted(lines, nuclide: str | None = None, change: float = 0.0, breakdown=BREAKDOWN):
    masses = Masses.ame2020()
    if nuclide:
        masses = masses.with_own({nuclide: (float(masses[nuclide].value) + change, masses[nuclide].sigma)})
    return fit_lines(lines, TERMS, reference=REFERENCE, breakdown=breakdown, policy="per-source", masses=masses)


@pytest.mark.parametrize("breakdown", [None, BREAKDOWN])
@pytest.mark.parametrize("nuclide", ["74Ge", "72Ge", "78Se"])
def test_slopes_are_those_of_fits_with_other_masses(lines, nuclide, breakdown):
    """Central difference over 2e-6 u: its own error is of third order, 1e-15 relative."""
    fit = refitted(lines, breakdown=breakdown)
    step = 1e-6
    up, down = (refitted(lines, nuclide, sign * step, breakdown) for sign in (1, -1))
    slopes = mass_slopes(fit)
    found = slopes.parameters[:, slopes.nuclides.index(nuclide)]
    # Noise factors move with the masses too, and the residual part is left out: a small part of a sigma each.
    assert found * step == pytest.approx((up.values - down.values) / 2, abs=2e-3 * fit.sigmas.max(), rel=1e-2)
    for name in ("72Ge80Se", "76Ge82Se", "70Ge80Se"):
        whole = (own_constants(up, name).values - own_constants(down, name).values) / 2
        own = own_constants(fit, name)
        if nuclide in own.nuclides:
            sigma = fit.model.masses[nuclide].sigma
            part = own.mass_factor[:, own.nuclides.index(nuclide)] * step / sigma
            assert part == pytest.approx(whole, rel=1e-2, abs=2e-3 * own.fit_sigmas.max())


def test_a_measured_isotopologue_does_not_feel_its_mass(lines):
    """With every term free for its own isotope, only the unmeasured one keeps the mass error (Y10 ~ rho)."""
    only = lines.subset(np.isin(np.array(lines.isotopologues)[lines.isotopologue], [REFERENCE, "72Ge80Se"]))
    everything = [f"{term.k}{term.l}" for term in TERMS]
    fit = refitted(only, breakdown={"Ge": everything})
    own, sigma = own_constants(fit, "72Ge80Se"), fit.model.masses["72Ge"].sigma
    relative = own.mass_factor[0, own.nuclides.index("72Ge")] / own.values[0]
    assert abs(relative) < 1e-6 * sigma / 72
    far = own_constants(fit, "72Ge78Se")
    # d ln(rho) = -d ln(mu_a)/2 of a nuclide that no line has: 78Se.
    expected = -far.isotopologue.mu_gradient[1] / 2 * fit.model.masses["78Se"].sigma
    assert far.mass_factor[0, far.nuclides.index("78Se")] / far.values[0] == pytest.approx(expected, rel=1e-6)
