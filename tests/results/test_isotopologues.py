"""Constants of isotopologues against the mass scaling written out, and against published tables."""

from __future__ import annotations

import numpy as np
import pytest
from invented_molecule import BREAKDOWN, BREAKDOWN_CONSTANTS, CONSTANTS, REFERENCE, TERMS, constants_of, simulated_lines
from made_fits import fit_with
from reference.carbon_monoxide import (
    FARRENQ_1991_DELTA,
    FARRENQ_1991_ELECTRON,
    FARRENQ_1991_MASSES,
    FARRENQ_1991_U,
    FARRENQ_1991_Y_13C16O,
)

from dunhamfit.errors import UsageError
from dunhamfit.fit.solve import fit_lines
from dunhamfit.lines.reading import read_lines
from dunhamfit.molecule.masses import Masses
from dunhamfit.molecule.terms import TermSet
from dunhamfit.results.isotopologues import mass_independent, own_constants

# How well the published U and Delta give the published Y_kl, which have ten digits (half a unit of the last one
# is up to 5e-10 of the value).
FARRENQ_TOLERANCE = {(1, 0): 5e-10, (2, 0): 5e-10, (0, 1): 5e-10, (1, 1): 3e-9, (0, 2): 2.5e-8}


def farrenq_fit(reference: str):
    """A fit that holds the constants of R. Farrenq et al., J. Mol. Spectrosc. 149, 375 (1991), for `reference`."""
    masses = Masses.ame2020().with_own(FARRENQ_1991_MASSES)
    own = {"C": float(FARRENQ_1991_MASSES[reference[:3]]), "O": float(FARRENQ_1991_MASSES[reference[3:]])}
    mu = own["C"] * own["O"] / (own["C"] + own["O"])
    y, d = {}, {}
    for (k, l), text in FARRENQ_1991_U.items():
        bare = float(text) * mu ** -(k / 2 + l)
        y[k, l] = bare
        for atom in "CO":
            if (k, l) in FARRENQ_1991_DELTA[atom]:
                delta = float(FARRENQ_1991_DELTA[atom][k, l])
                d[atom, k, l] = bare * delta * float(FARRENQ_1991_ELECTRON) / own[atom]
                y[k, l] += d[atom, k, l]
    return fit_with(y, reference=reference, breakdown=d, masses=masses)


@pytest.mark.parametrize("reference", ["12C16O", "12C18O"])
def test_published_constants_of_another_isotopologue(reference):
    own = own_constants(farrenq_fit(reference), "13C16O")
    for (k, l), published in FARRENQ_1991_Y_13C16O.items():
        assert own.values[own.index(k, l)] == pytest.approx(published, rel=FARRENQ_TOLERANCE.get((k, l), 7e-5))


@pytest.mark.parametrize("reference", ["12C16O", "13C17O"])
def test_published_u_and_delta(reference):
    """Back from the Y_kl of whatever reference to U and Delta."""
    found = mass_independent(farrenq_fit(reference))
    for (k, l), text in FARRENQ_1991_U.items():
        assert found.value(f"U{k}{l}") == pytest.approx(float(text), rel=1e-12)
    for atom, deltas in FARRENQ_1991_DELTA.items():
        for (k, l), text in deltas.items():
            # The paper's electron mass is 8e-7 larger than that of CODATA 2022.
            assert found.value(f"Delta{k}{l}_{atom}") == pytest.approx(float(text), rel=1e-6)


def test_scaling_is_that_of_the_definition():
    lines = simulated_lines(seed=1, scatter=False)
    fit = fit_lines(lines, TERMS, reference=REFERENCE, breakdown=BREAKDOWN)
    for name in (REFERENCE, "76Ge82Se", "70Ge77Se"):
        own = own_constants(fit, name)
        truth = np.array([constants_of(name)[term.k, term.l] for term in TERMS])
        # Exact lines are doubles of 1e3 cm-1, rounded by 1e-13: less than 1e-6 of a sigma.
        assert own.values == pytest.approx(truth, abs=1e-5 * own.sigmas.max(), rel=1e-9)


def test_sigmas_cover_over_many_simulations():
    """z of every U, Delta and Y_kl of an unmeasured isotopologue; 60 sets, chi2 within 4 of its own sigma."""
    scores = []
    for seed in range(60):
        fit = fit_lines(simulated_lines(seed=seed, j_max=15), TERMS, reference=REFERENCE, breakdown=BREAKDOWN)
        own = own_constants(fit, "70Ge82Se")
        truth = np.array([constants_of("70Ge82Se")[term.k, term.l] for term in TERMS])
        found = mass_independent(fit)
        bare = {
            key: value - sum(v for (_, *kl), v in BREAKDOWN_CONSTANTS.items() if tuple(kl) == key)
            for key, value in CONSTANTS.items()
        }
        mass = {atom: float(fit.model.reference.masses[place].value) for place, atom in enumerate(("Ge", "Se"))}
        expected = [
            bare[k, l] * fit.model.reference.mu ** (k / 2 + l)
            if kind == "U"
            else BREAKDOWN_CONSTANTS[atom, k, l] * mass[atom] / (5.485799090441e-4 * bare[k, l])
            for kind, atom, k, l in zip(found.kinds, found.atoms, found.k, found.l, strict=True)
        ]
        scores.append(np.concatenate([(own.values - truth) / own.sigmas, (found.values - expected) / found.sigmas]))
    squares = np.mean(np.square(scores), axis=0)
    assert np.all(np.abs(squares - 1) < 4 * np.sqrt(2 / 60))
    assert found.sigmas == pytest.approx(np.sqrt(np.diag(found.covariance)), rel=1e-9)


def test_two_equal_atoms_share_one_delta():
    """Y(a) = mu_a^-1/2 U10 [1 + m_e Delta (1/M + 1/M')] for nitrogen, both routes."""
    fit = fit_with({(1, 0): 2358.0}, reference="14N14N", breakdown={("N", 1, 0): 0.02})
    found, masses = mass_independent(fit), Masses.ame2020()
    first, second = float(masses["14N"].value), float(masses["15N"].value)
    electron = 5.485799090441e-4
    for pair in ((first, first), (first, second), (second, second)):
        name = "".join("14N" if m == first else "15N" for m in pair)
        mu = pair[0] * pair[1] / sum(pair)
        expected = (
            found.value("U10") / np.sqrt(mu) * (1 + electron * found.value("Delta10_N") * sum(1 / m for m in pair))
        )
        assert own_constants(fit, name).values[0] == pytest.approx(expected, rel=1e-13)
    with pytest.raises(UsageError, match="one nuclide or two elements"):
        mass_independent(fit_with({(1, 0): 2319.0}, reference="14N15N", breakdown={("N", 1, 0): 0.02}))


def test_ions_use_the_charge_modified_mass():
    """rho^2 with mu = M_A M_B/(M_A + M_B - m_e) (J. K. G. Watson, J. Mol. Spectrosc. 80, 411 (1980))."""
    own = own_constants(fit_with({(0, 1): 13.9}, reference="12C1H+"), "12C2H+")
    masses, electron = Masses.ame2020(), 5.485799090441e-4
    mu = [12 * m / (12 + m - electron) for m in (float(masses["1H"].value), float(masses["2H"].value))]
    assert own.values[0] == pytest.approx(13.9 * mu[0] / mu[1], rel=1e-14)


def test_another_molecule_is_refused():
    fit = fit_with({(1, 0): 1000.0}, reference="28Si32S")
    with pytest.raises(UsageError, match="not an isotopologue of the same molecule"):
        own_constants(fit, "28Si16O")
    with pytest.raises(UsageError, match="is not among U10"):
        mass_independent(fit).value("U01")


SIX = ["10", "20", "30", "01", "11", "02"]


@pytest.mark.filterwarnings("ignore:.*HITRAN uncertainty codes")
def test_carbon_monoxide(shared_reference):
    """Delta of George et al., J. Mol. Spectrosc. 165, 500 (1994), within 0.010: other lines, other digits."""
    lines = read_lines(shared_reference / "co_hitran2016_6iso.par", format="hitran", use="v_upper <= 5")
    terms, breakdown = TermSet.from_orders([5, 4, 3, 2, 1]), {"C": SIX, "O": SIX}
    found = mass_independent(fit_lines(lines, terms, reference="12C16O", breakdown=breakdown, policy="per-band"))
    published = {"Delta10_C": 0.694, "Delta10_O": -0.168, "Delta01_C": -2.056, "Delta01_O": -2.098}
    for name, value in published.items():
        assert found.value(name) == pytest.approx(value, abs=0.010)
    # With the decade codes as sigmas, the higher ones are lost in the uncertainty.
    stated = mass_independent(fit_lines(lines, terms, reference="12C16O", breakdown=breakdown))
    assert set(stated.not_determined()) == {"Delta20_C", "Delta30_C", "Delta20_O", "Delta30_O"}
