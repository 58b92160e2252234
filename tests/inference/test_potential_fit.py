"""Fits through one potential, against potentials whose levels are known without Dunham's relations."""

from __future__ import annotations

import numpy as np
import pytest
from reference import kratzer, morse
from related_lines import model_of, noisy_lines

from dunhamfit.errors import CannotDetermine, UsageError
from dunhamfit.fit.model import Prior
from dunhamfit.fit.solve import fit_model, make_model
from dunhamfit.inference.constrained import fit_constrained, free_values
from dunhamfit.inference.potential_fit import PotentialMap
from dunhamfit.lines.line_list import LineList, Source
from dunhamfit.molecule.terms import TermSet

# D (1 - r_e/r)^2 = D xi^2/(1 + xi)^2: a_n = (-1)^n (n + 1) exactly.
KRATZER_A = np.array([-2.0, 3.0, -4.0, 5.0])
KRATZER_B = 1.93128


def lines_between(position, *, v_max: int, j_max: int, sigma: float, reference: str) -> LineList:
    """R and P lines of v <- 0, and rotation within v = 0, 1, 2, without noise; `position(v', J', v, J)` in cm-1."""
    bands = [*((v, 0) for v in range(1, v_max + 1)), (0, 0), (1, 1), (2, 2)]
    rows = [
        (v_upper, j + branch, v_lower, j)
        for v_upper, v_lower in bands
        for j in range(j_max + 1)
        for branch in (1, -1)
        if j + branch >= 0 and (v_upper > v_lower or branch == 1)
    ]
    v_upper, j_upper, v_lower, j_lower = np.array(rows).T
    zero = np.zeros(len(rows), dtype=int)
    return LineList(
        position=np.array([position(*row) for row in rows]),
        sigma=zero + sigma,
        v_upper=v_upper,
        j_upper=j_upper,
        v_lower=v_lower,
        j_lower=j_lower,
        isotopologue=zero,
        source=zero,
        file=zero,
        row=np.arange(1, len(rows) + 1),
        exclusion=zero,
        isotopologues=(reference,),
        sources=(Source("exact"),),
    )


def shape_from(lines: LineList, terms: list[int], order: int, orders: int | None = None):
    """The fit, its map and (omega_e, B_e, a_1 ...) for terms up to the given powers."""
    model = make_model(lines, TermSet.from_orders(terms), reference=lines.isotopologues[0])
    potential = PotentialMap(model, order, orders=orders)
    fit = fit_constrained(model, lines, potential)
    return fit, potential, free_values(fit, potential, potential.start(fit.values))


def kratzer_errors(terms, order, orders, *, v_max, j_max) -> tuple[float, np.ndarray]:
    """Relative errors of r_e and a_1 to a_4; r_e goes as B_e^(-1/2)."""
    lines = lines_between(kratzer.position, v_max=v_max, j_max=j_max, sigma=1e-7, reference="12C16O")
    _, _, free = shape_from(lines, terms, order, orders)
    return abs(free[1] / KRATZER_B - 1) / 2, np.abs(free[2:6] / KRATZER_A - 1)


def test_kratzers_potential_comes_back():
    r_e, a = kratzer_errors([6, 5, 4, 3, 2], 10, 2, v_max=5, j_max=15)
    # What 25 terms and two orders leave out, measured: r_e 7e-13, a_1 to a_4 9e-11, 1e-9, 3e-8, 3e-8; it falls as
    # terms are added, below. Room of some 7.
    assert r_e < 5e-12
    assert np.all(a < [7e-10, 7e-9, 2.5e-7, 2.5e-7])


def test_what_is_left_out_falls_as_terms_are_added():
    few = kratzer_errors([4, 3, 2, 1], 6, 2, v_max=4, j_max=12)[1]
    more = kratzer_errors([5, 4, 3, 2], 8, 2, v_max=5, j_max=15)[1]
    most = kratzer_errors([6, 5, 4, 3, 2], 10, 2, v_max=5, j_max=15)[1]
    assert np.all(more < few / 3) and np.all(most < more / 2)


@pytest.mark.slow
def test_kratzers_potential_to_a_part_in_a_thousand_million():
    """39 terms, a_1 to a_14 and three orders; nearly all of the time derives Dunham's relations."""
    r_e, a = kratzer_errors([8, 7, 6, 5, 4, 3], 14, 3, v_max=8, j_max=20)
    # Measured: r_e 3e-15; a_1 to a_4 2e-12, 6e-12, 4e-10, 4e-10. The bar is 1e-9.
    assert r_e < 1e-9 and np.all(a < 1e-9)


def test_the_levels_of_the_rotating_morse_oscillator_are_those_of_the_formula_without_rotation():
    x = np.arange(7) + 0.5
    expected = morse.OMEGA_E * x - morse.OMEGA_E_X_E * x**2
    # Eigenvalues of a matrix of norm 1e5 cm-1 are good to some 1e-10 cm-1.
    assert np.allclose(morse.levels(6, 0)[:, 0], expected, rtol=0, atol=2e-9)


def test_morses_potential_comes_back():
    levels = morse.levels(5, 16)
    lines = lines_between(
        lambda v, j, w, i: levels[v, j] - levels[w, i], v_max=5, j_max=15, sigma=1e-7, reference="28Si32S"
    )
    fit, _, free = shape_from(lines, [6, 5, 4, 3, 2], 10, 2)
    # Left out: a_11 and on, and third-order parts. Measured: 6e-11, 1e-12; 8e-12, 3e-8, 2e-8, 1.4e-5; 3e-10, 6e-8.
    assert free[0] == pytest.approx(morse.OMEGA_E, rel=5e-10)
    assert free[1] == pytest.approx(morse.B_E, rel=1e-11)
    assert np.all(np.abs(free[2:6] / morse.EXACT_A - 1) < [5e-11, 2e-7, 2e-7, 1e-4])
    # Dunham's Y10 and Y20 of a Morse oscillator are omega_e and -omega_e x_e to all orders.
    assert fit.value(1, 0) == pytest.approx(morse.OMEGA_E, rel=2e-9)
    assert fit.value(2, 0) == pytest.approx(-morse.OMEGA_E_X_E, rel=4e-7)


def test_the_jacobian_is_that_of_the_map():
    model = model_of(noisy_lines(j_max=5))
    potential = PotentialMap(model, 3, orders=2)
    free = np.array([701.25, 0.3125, -2.4, 3.9, -5.0])
    jacobian = potential.jacobian(free)
    for place, value in enumerate(free):
        step = np.zeros_like(free)
        step[place] = 1e-5 * abs(value)
        numerical = (potential.values(free + step) - potential.values(free - step)) / (2 * step[place])
        size = np.abs(jacobian * free).max(axis=1) / abs(value)
        # Central differences of relative step 1e-5: truncation and rounding 1e-10 of the largest share.
        assert np.all(np.abs(jacobian[:, place] - numerical) <= 1e-8 * size)


def test_sigma_of_a_term_follows_from_those_of_the_potential():
    """As many constants of the potential as terms make the map one to one: nothing changes but the names."""
    lines = noisy_lines(bands=((1, 0), (2, 0), (2, 1), (3, 2)))
    names = ("Y10", "Y20", "Y01", "Y11")
    model = model_of(lines, names=names)
    fit = fit_constrained(model, lines, PotentialMap(model, 2, orders=2))
    plain = fit_model(model, lines)
    assert np.max(np.abs((fit.values - plain.values) / plain.sigmas)) < 1e-6
    assert np.allclose(fit.sigmas, plain.sigmas, rtol=1e-6)
    assert set(fit.origins.values()) == {"potential to a_2"}


def test_what_is_refused():
    lines = noisy_lines(j_max=8)
    model = model_of(lines)
    with pytest.raises(UsageError, match=r"potential must be 1 or more, the highest a_N \(got 0\)"):
        PotentialMap(model, 0)
    fixed = model_of(lines, priors={"Y11": Prior(-1.5e-3, 0.0)})
    with pytest.raises(UsageError, match="Y11: every term follows from the potential; none can be fixed as well"):
        PotentialMap(fixed, 2)
    rotation = model_of(lines, names=("Y20", "Y01", "Y11"))
    with pytest.raises(UsageError, match="a potential needs the terms Y10 and Y01"):
        fit_constrained(rotation, lines, PotentialMap(rotation, 2))
    with pytest.raises(CannotDetermine, match=r"a_[4-9].*ask for fewer, or add lines"):
        fit_constrained(model, lines, PotentialMap(model, 9, orders=1))


def test_an_active_bound_of_the_shape_has_no_unit():
    lines = noisy_lines(bands=((1, 0), (2, 0), (2, 1), (3, 2)))
    model = model_of(lines, names=("Y10", "Y20", "Y01", "Y11"))
    fit = fit_constrained(model, lines, PotentialMap(model, 2, orders=2), bounds={"a_1": (-1.0, 0.0)})
    assert fit.warnings == (
        "a_1 stands at a bound of [-1.0, 0.0]: its sigma is shown as 0, and those of other constants take it as known",
    )
