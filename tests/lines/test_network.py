"""The shell-wise network against dense linear algebra, and what it must not depend on."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from invented_bands import bands, energy, line, moved, noisy, of_band

from dunhamfit.lines.line_list import Source, merge
from dunhamfit.lines.network import WIDE_SCALE, adjust

TRIANGLE = ("1-0", "2-0", "2-1", "3-1", "3-2")


def dense(lines):
    """Residuals, redundancies and their covariance by numpy's SVD: levels, one offset a band and source, scales.

    General-purpose dense algebra on the plain, rank-deficient design: it knows no trees and no shells.
    """
    upper = list(zip(lines.v_upper.tolist(), lines.j_upper.tolist(), strict=True))
    lower = list(zip(lines.v_lower.tolist(), lines.j_lower.tolist(), strict=True))
    band = list(zip(lines.v_upper.tolist(), lines.v_lower.tolist(), lines.source.tolist(), strict=True))
    names = {name: k for k, name in enumerate(dict.fromkeys([*upper, *lower, *band]))}
    scales = [code for code, source in enumerate(lines.sources) if source.scale]
    design = np.zeros((len(lines) + len(scales), len(names) + len(scales)))
    for row, (high, low, own) in enumerate(zip(upper, lower, band, strict=True)):
        design[row, names[high]] += 1
        design[row, names[low]] -= 1
        design[row, names[own]] += 1
    for number, code in enumerate(scales):
        prior = min(lines.sources[code].scale, WIDE_SCALE)
        design[: len(lines), len(names) + number] = np.where(lines.source == code, lines.position * prior, 0)
    whitened = design.copy()
    whitened[: len(lines)] /= lines.sigma[:, None]
    whitened[len(lines) :, len(names) :] = np.eye(len(scales))
    observed = np.concatenate([lines.position / lines.sigma, np.zeros(len(scales))])
    left, size, _ = np.linalg.svd(whitened, full_matrices=False)
    left = left[:, size > 1e-11 * size[0]]
    projector = np.eye(len(whitened)) - left @ left.T
    return (projector @ observed)[: len(lines)], projector[: len(lines), : len(lines)]


def mixed_sources(rng, *, scale=None):
    """Two sources that share bands, uneven uncertainties, gaps in J, a band of pure rotation."""
    first = bands(*TRIANGLE, "0-0", j_max=9, source=Source("one", scale=scale))
    second = bands("2-0", "3-1", j_max=7, sigma=3e-4, source=Source("two"))
    both = merge([first, second])
    both = both.subset(rng.random(len(both)) < 0.85)
    return noisy(both, rng)


@pytest.mark.parametrize("scale", [None, 1e-7])
@pytest.mark.parametrize("seed", range(5))
def test_agrees_with_dense_algebra(seed, scale):
    rng = np.random.default_rng(seed)
    lines = mixed_sources(rng, scale=scale)
    network = adjust(lines, np.arange(len(lines)))
    residual, projector = dense(lines)
    # The dense route works on positions of 2000 cm-1 with sigma 1e-4: 2e7 times epsilon times a condition
    # number of some 1e3 leaves about 1e-6 sigma.
    np.testing.assert_allclose(network.residual, residual, atol=2e-6)
    np.testing.assert_allclose(network.redundancy, np.diag(projector), atol=1e-9)
    for number in (0, len(lines) // 2, len(lines) - 1):
        np.testing.assert_allclose(network.cofactors(number), projector[number], atol=1e-9)


def test_quadrupole_lines_join_levels_two_apart(rng):
    lines = bands("1-0", "2-0", "2-1", j_max=8)
    s_lines = lines.subset(lines.j_upper > lines.j_lower)
    position = energy(s_lines.v_upper, s_lines.j_upper + 1) - energy(s_lines.v_lower, s_lines.j_lower)
    s_lines = replace(s_lines, position=position, j_upper=s_lines.j_upper + 1)
    lines = noisy(merge([lines, s_lines]), rng)
    network = adjust(lines, np.arange(len(lines)))
    residual, projector = dense(lines)
    np.testing.assert_allclose(network.residual, residual, atol=2e-6)
    np.testing.assert_allclose(network.redundancy, np.diag(projector), atol=1e-9)


def test_order_of_the_lines_changes_nothing(rng):
    lines = mixed_sources(rng)
    order = rng.permutation(len(lines))
    straight, shuffled = adjust(lines, np.arange(len(lines))), adjust(lines.subset(order), np.arange(len(lines)))
    np.testing.assert_allclose(shuffled.residual, straight.residual[order], atol=1e-6)
    np.testing.assert_allclose(shuffled.redundancy, straight.redundancy[order], atol=1e-10)
    np.testing.assert_allclose(shuffled.closure, straight.closure, atol=1e-10)


def test_offsets_of_bands_leave_residuals_as_they_are(rng):
    lines = mixed_sources(rng)
    shift = np.zeros(len(lines))
    for name, size in (("1-0", 0.7), ("2-0", -0.02), ("0-0", 0.3)):
        shift[of_band(lines, name)] = size
    before, after = adjust(lines, np.arange(len(lines))), adjust(moved(lines, shift), np.arange(len(lines)))
    # An offset of 0.7 cm-1 is 7000 sigma; what remains is rounding of the positions, 1e-13/1e-4.
    np.testing.assert_allclose(after.residual, before.residual, atol=1e-6)


def test_closures_of_shifted_bands_are_the_sums_of_the_shifts():
    lines = bands(*TRIANGLE, j_max=9)
    offsets = {"1-0": 0.7, "2-0": -0.02, "2-1": 0.1, "3-1": 0.0, "3-2": 1.0}
    shift = sum(np.where(of_band(lines, name), size, 0.0) for name, size in offsets.items())
    network = adjust(moved(lines, shift), np.arange(len(lines)))
    by_band = [
        offsets[f"{high}-{low}"] for high, low in zip(network.bands.v_upper, network.bands.v_lower, strict=True)
    ]
    assert len(network.closure) == 2  # five bands, four levels v: 5 - (4 - 1)
    np.testing.assert_allclose(network.closure, network.bands.loops @ by_band, atol=1e-9)


def test_loops_that_meet_in_no_level_are_not_counted():
    lines = bands("1-0", "2-0", "2-1", j_max=20)
    apart = np.where(of_band(lines, "2-1"), lines.j_lower > 12, lines.j_lower < 8)
    chosen = np.flatnonzero(apart)
    assert len(adjust(lines, chosen).closure) == 0
    assert len(adjust(lines, np.arange(len(lines))).closure) == 1


def test_one_chain_of_a_band_leaves_its_loop_open():
    # Each line changes J by one, so a way round three bands comes back one level off and closes in two rounds
    # only, through both parities of 2-1. With one of them missing nothing fixes the offset.
    lines = bands("1-0", "2-0", "2-1", j_max=9)
    chosen = np.flatnonzero(~(of_band(lines, "2-1") & (lines.j_lower % 2 == 1)))
    assert len(adjust(lines, chosen).closure) == 0


def test_loops_known_only_as_a_sum_are_kept_as_that_sum():
    # Two hot bands, of which 2-1 has the one parity and 3-1 the other: closed paths must use both.
    lines = bands("1-0", "2-0", "3-0", "2-1", "3-1", j_max=9)
    gone = of_band(lines, "2-1") & (lines.j_lower % 2 == 1) | of_band(lines, "3-1") & (lines.j_lower % 2 == 0)
    chosen = np.flatnonzero(~gone)
    offset = np.where(of_band(lines, "2-1"), 0.3, 0.0) + np.where(of_band(lines, "3-1"), 0.5, 0.0)
    network = adjust(moved(lines, offset), chosen)
    by_band = [0.3 if high == 2 else 0.5 for high in network.bands.v_upper] * (network.bands.v_lower == 1)
    assert len(network.closure) == 1
    assert np.count_nonzero(network.bands.loops) > 3
    np.testing.assert_allclose(network.closure, network.bands.loops @ by_band, atol=1e-9)


def test_uncertainty_of_a_closure_by_simulation(rng):
    lines = bands("1-0", "2-0", "2-1", j_max=8)
    drawn = np.array([adjust(noisy(lines, rng), np.arange(len(lines))).closure[0] for _ in range(200)])
    sigma = float(np.sqrt(adjust(lines, np.arange(len(lines))).covariance[0, 0]))
    # 200 draws: the standard deviation is known to 5 %, the mean to 7 % of sigma; four of each allowed.
    assert drawn.std() / sigma == pytest.approx(1.0, abs=0.2)
    assert abs(drawn.mean()) < 0.28 * sigma


def test_very_uneven_uncertainties_keep_their_accuracy(rng):
    # Microwave lines of 1e-8 cm-1 beside infrared ones of 1e-3: weights span ten decades.
    lines = merge(
        [
            bands("0-0", "1-1", j_max=9, sigma=1e-8, source=Source("microwave")),
            bands("1-0", "2-0", "2-1", j_max=9, sigma=1e-3, source=Source("infrared")),
        ]
    )
    lines = moved(lines, rng.normal(0.0, lines.sigma))
    network = adjust(lines, np.arange(len(lines)))
    assert np.sum(network.redundancy) == pytest.approx(np.round(np.sum(network.redundancy)), abs=1e-8)
    # The whole misfit is that of some 40 infrared lines: chi2 within five standard deviations of its mean.
    expected = np.sum(network.redundancy)
    assert network.residual @ network.residual == pytest.approx(expected, abs=5 * np.sqrt(2 * expected))
    index = line(lines, "2-0", "P(4)")
    again = adjust(moved(lines, np.where(np.arange(len(lines)) == index, 1.0, 0.0)), np.arange(len(lines)))
    change = (again.residual - network.residual) * lines.sigma[index]
    np.testing.assert_allclose(change, network.cofactors(index), atol=1e-6)
