"""Predictions: exact values, sigmas that cover and add up, and a word for every line outside what was observed."""

from __future__ import annotations

import numpy as np
import pytest
from invented_molecule import BREAKDOWN, REFERENCE, TERMS, energy, simulated_lines

from dunhamfit.errors import UsageError
from dunhamfit.fit.design import calculate
from dunhamfit.fit.solve import fit_lines
from dunhamfit.lines.reading import read_lines
from dunhamfit.molecule.masses import Masses
from dunhamfit.molecule.terms import TermSet
from dunhamfit.results.near_equal import near_equal_sets
from dunhamfit.results.predict import predict, predict_lines


def fitted(seed: int, *, offset: float | None = None, j_max: int = 25, scatter: bool = True):
    lines = simulated_lines(seed=seed, offset=offset, j_max=j_max, scatter=scatter)
    return fit_lines(lines, TERMS, reference=REFERENCE, breakdown=BREAKDOWN)


def test_exact_lines_are_predicted_exactly():
    """Bands and isotopologues that were not in the fit; doubles of 1e3 cm-1 are rounded by 1e-13."""
    fit = fitted(1, scatter=False)
    for name in (REFERENCE, "70Ge82Se"):
        found = predict(fit, v_upper=3, v_lower=0, j_max=30, isotopologue=name)
        exact = energy(name, found.v_upper, found.j_upper) - energy(name, found.v_lower, found.j_lower)
        assert np.abs(found.position - exact).max() < 1e-9


def test_positions_are_those_of_the_residuals():
    """Observed less predicted is the residual of a fit without calibration terms, to the last place."""
    fit = fitted(2)
    lines = fit.lines
    for code, name in enumerate(lines.isotopologues):
        own = lines.subset(lines.isotopologue == code)
        found = predict_lines(fit, own.v_upper, own.j_upper, own.v_lower, own.j_lower, isotopologue=name)
        calculated = calculate(fit.model, own, fit.values)
        assert np.abs(found.position - calculated.high).max() <= np.spacing(2000.0)


def test_lines_of_a_band():
    fit = fitted(3)
    found = predict(fit, v_upper=2, v_lower=1, j_max=2)
    assert list(zip(found.j_upper.tolist(), found.j_lower.tolist(), strict=True)) == [
        (1, 2), (0, 1), (1, 0), (2, 1), (3, 2),
    ]  # fmt: skip
    rotation = predict(fit, v_upper=0, v_lower=0, j_max=1)
    assert list(zip(rotation.j_upper.tolist(), rotation.j_lower.tolist(), strict=True)) == [(1, 0), (2, 1)]
    assert np.all(rotation.position > 0)


def test_sigma_is_that_of_the_covariance_and_its_parts_add_up():
    """By numerical derivatives of the predicted positions, and the conditional covariance with calibration known."""
    fit = fitted(4, offset=5e-5)
    found = predict(fit, v_upper=5, v_lower=1, j_max=40, isotopologue="76Ge82Se")
    count = len(fit.constants)
    slopes = np.empty((len(found), count))
    for index in range(count):
        step = max(1e-3 * abs(fit.values[index]), 1e-12)
        up, down = np.array(fit.values), np.array(fit.values)
        up[index] += step
        down[index] -= step
        slopes[:, index] = (positions(fit, up) - positions(fit, down)) / (2 * step)
    covariance = fit.parameter_covariance
    inner = covariance[:count, :count]
    cross = covariance[:count, count:]
    known = inner - cross @ np.linalg.solve(covariance[count:, count:], cross.T)
    variances = [np.einsum("ni,ij,nj->n", slopes, c, slopes) for c in (inner, known)]
    parts = found.parts
    # The positions are linear; their differences keep some eight digits.
    assert parts.fit == pytest.approx(np.sqrt(variances[1]), rel=1e-4)
    assert np.hypot(parts.fit, parts.calibration) == pytest.approx(np.sqrt(variances[0]), rel=1e-4)
    assert np.all(parts.calibration > 0)
    assert parts.model is None
    assert found.sigma == pytest.approx(np.sqrt(variances[0] + parts.masses**2), rel=1e-4)


def positions(fit, values):
    fields = {name: getattr(fit, name) for name in ("model", "lines", "factor", "noise", "groups", "statistics")}
    moved = type(fit)(values=values, **fields)
    return predict(moved, v_upper=5, v_lower=1, j_max=40, isotopologue="76Ge82Se").position


def test_no_calibration_part_without_calibration_terms():
    assert np.all(predict(fitted(5), v_upper=1, v_lower=0, j_max=5).parts.calibration == 0.0)


@pytest.mark.slow
def test_sigma_covers():
    """68.3 % of a normal distribution; the mean over 200 sets, whose lines hang together, scatters by some 0.015."""
    hits = {"inside": [], "other": []}
    for seed in range(200):
        fit = fitted(1000 + seed, offset=5e-5, j_max=12)
        for key, name in (("inside", REFERENCE), ("other", "70Ge78Se")):
            for v_upper, v_lower in ((1, 0), (2, 0), (3, 2)):
                found = predict(fit, v_upper=v_upper, v_lower=v_lower, j_max=12, isotopologue=name)
                truth = energy(name, v_upper, found.j_upper) - energy(name, v_lower, found.j_lower)
                hits[key].append(np.mean(np.abs(found.position - truth) <= found.sigma))
    assert 0.65 < np.mean(hits["inside"]) < 0.71
    assert 0.65 < np.mean(hits["other"]) < 0.71


def test_every_line_outside_is_flagged():
    """Against a search through the used lines, written out."""
    fit = fitted(6, j_max=8)
    lines = fit.lines.excluded(fit.lines.j_lower < 2, "left out for this test")
    fit = fit_lines(lines, TERMS, reference=REFERENCE, breakdown=BREAKDOWN)
    lines = fit.lines.subset(fit.lines.used)

    def reached(name, v, j):
        own = [lines.isotopologues[code] == name for code in lines.isotopologue]
        js = [*lines.j_upper[own & (lines.v_upper == v)], *lines.j_lower[own & (lines.v_lower == v)]]
        return bool(js) and min(js) <= j <= max(js)

    for name in (REFERENCE, "70Ge82Se"):
        for v_upper in (1, 3, 4):
            found = predict(fit, v_upper=v_upper, v_lower=0, j_max=11, isotopologue=name)
            for index, inside in enumerate(found.inside):
                expected = reached(name, v_upper, found.j_upper[index]) and reached(name, 0, found.j_lower[index])
                assert inside == expected
    assert set(found.where) == {"outside"}
    assert "other isotopologue" in predict(fit, v_upper=1, v_lower=0, j_max=5, isotopologue="70Ge82Se").where


def test_the_model_part_is_the_spread_over_near_equal_sets():
    fit = fitted(7)
    selection = near_equal_sets(fit)
    assert selection.wide.model.reference == fit.model.reference
    plain = predict(fit, v_upper=6, v_lower=0, j_max=60)
    spread = predict(fit, v_upper=6, v_lower=0, j_max=60, selection=selection)
    assert np.array_equal(plain.parts.fit, spread.parts.fit)
    assert spread.sigma == pytest.approx(np.hypot(plain.sigma, spread.parts.model))
    # Written out: the weighted root mean square of how far each near-equal set is from the quoted position.
    predicted = []
    for candidate in selection.near_equal:
        values = np.zeros(len(selection.wide.values))
        values[candidate.columns] = candidate.values
        model, wide = selection.wide.model, selection.wide
        fields = {name: getattr(wide, name) for name in ("lines", "factor", "noise", "groups", "statistics")}
        predicted.append(
            predict(type(wide)(model=model, values=values, **fields), v_upper=6, v_lower=0, j_max=60).position
        )
    expected = np.sqrt(selection.weights @ (np.array(predicted) - plain.position) ** 2)
    assert spread.parts.model == pytest.approx(expected, rel=1e-5, abs=1e-12)
    assert spread.records()[0]["sigma_model"] is not None


def test_records_hold_other_units():
    """1 cm-1 = 29979.2458 MHz; a wavelength of 1e4/nu um, d(1/x) = dx/x^2."""
    found = predict(fitted(8), v_upper=1, v_lower=0, j_max=3)
    wave, frequency, length = (found.records(unit)[2] for unit in ("cm-1", "MHz", "um"))
    assert wave["sigma_model"] is None
    assert frequency["position"] == pytest.approx(wave["position"] * 29979.2458, rel=1e-15)
    assert frequency["sigma"] == pytest.approx(wave["sigma"] * 29979.2458, rel=1e-15)
    assert length["position"] == pytest.approx(1e4 / wave["position"], rel=1e-15)
    assert length["sigma"] / length["position"] == pytest.approx(wave["sigma"] / wave["position"], rel=1e-12)
    assert length["unit"] == "um"


def test_wrong_use_is_refused():
    fit = fitted(9)
    with pytest.raises(UsageError, match="a band needs v' >= v'' >= 0"):
        predict(fit, v_upper=0, v_lower=1, j_max=5)
    with pytest.raises(UsageError, match="not an isotopologue of the same molecule"):
        predict(fit, v_upper=1, v_lower=0, j_max=5, isotopologue="28Si32S")
    with pytest.raises(UsageError, match="whole numbers from 0"):
        predict_lines(fit, [], [], [], [])
    with pytest.raises(UsageError, match="unit 'nm' is not known"):
        predict(fit, v_upper=1, v_lower=0, j_max=5).records("nm")


SIX = ["10", "20", "30", "01", "11", "02"]
# The evaluation of 2003 (G. Audi et al., Nucl. Phys. A 729, 337 (2003); from memory), which was current when
# the constants behind the list were made.
MASSES_2003 = {
    "13C": ("13.0033548378", 1.0e-9),
    "16O": ("15.99491461956", 1.6e-10),
    "17O": ("16.99913170", 1.2e-7),
    "18O": ("17.9991610", 7e-7),
}


@pytest.mark.filterwarnings("ignore:.*HITRAN uncertainty codes")
@pytest.mark.parametrize("own_masses", [None, MASSES_2003])
def test_an_isotopologue_that_was_left_out(shared_reference, own_masses):
    """13C18O of HITRAN2016 from the other five isotopologues.

    With the masses of 2020 the list runs away by -1.4e-6 cm-1 for each vibrational quantum; with those of
    2003 by less than 2e-7. So it is the mass of 18O, which has moved by twice its old uncertainty, and not
    the form of the model.
    """
    lines = read_lines(shared_reference / "co_hitran2016_6iso.par", format="hitran", use="v_upper <= 5")
    left_out = lines.isotopologue == lines.isotopologues.index("13C18O")
    fit = fit_lines(
        lines.subset(~left_out),
        TermSet.from_orders([5, 4, 3, 2, 1]),
        reference="12C16O",
        breakdown={"C": SIX, "O": SIX},
        policy="per-band",
        masses=Masses.ame2020().with_own(own_masses or {}),
    )
    rest = lines.subset(left_out)
    assert len(rest) == 674
    found = predict_lines(fit, rest.v_upper, rest.j_upper, rest.v_lower, rest.j_lower, isotopologue="13C18O")
    off = rest.position - found.position
    assert np.abs(off).max() < 1.5e-5
    assert set(found.where) == {"other isotopologue"}
    fourth = (rest.v_upper == 4) & (rest.v_lower == 0)
    # The list is printed to 1e-6 cm-1.
    assert off[fourth].mean() == pytest.approx(-5e-6 if own_masses is None else 0.0, abs=1e-6)


@pytest.mark.filterwarnings("ignore:.*HITRAN uncertainty codes")
def test_an_old_mass_would_have_been_covered(shared_reference):
    """With the uncertainty that the mass of 18O had in 2003 (7e-7 u) 4-0 of 13C18O is uncertain by 3e-6 cm-1."""
    lines = read_lines(shared_reference / "co_hitran2016_6iso.par", format="hitran", use="v_upper <= 5")
    rest = lines.subset(lines.isotopologue != lines.isotopologues.index("13C18O"))
    found = []
    for change in (0.0, 7e-7):
        value = float(Masses.ame2020()["18O"].value) + change
        masses = Masses.ame2020().with_own({"18O": (value, 7e-7)})
        terms, breakdown = TermSet.from_orders([5, 4, 3, 2, 1]), {"C": SIX, "O": SIX}
        fit = fit_lines(rest, terms, reference="12C16O", breakdown=breakdown, policy="per-band", masses=masses)
        found.append(predict(fit, v_upper=4, v_lower=0, j_max=20, isotopologue="13C18O"))
    moved = np.abs(found[1].position - found[0].position)
    # The weights of the bands follow the change of mass, which the slopes leave out: a few per cent.
    assert found[0].parts.masses == pytest.approx(moved, rel=0.1)
    assert found[0].parts.masses.mean() == pytest.approx(3e-6, rel=0.1)
