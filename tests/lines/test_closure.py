"""Moved lines and shifted bands are named, clean lists are left alone. All lists but the last are invented."""

from __future__ import annotations

from dataclasses import replace
from statistics import NormalDist

import numpy as np
import pytest
from invented_bands import bands, line, moved, noisy, of_band

from dunhamfit.errors import UsageError
from dunhamfit.lines.closure import check_closure
from dunhamfit.lines.line_list import Source, merge
from dunhamfit.lines.network import adjust
from dunhamfit.lines.reading import read_source
from dunhamfit.lines.request import SourceRequest

SIGMA = 1e-4
SIX_BANDS = ("1-0", "2-0", "3-0", "2-1", "3-1", "3-2")


def shifted(lines, index, size):
    return moved(lines, np.where(np.arange(len(lines)) == index, size, 0.0))


def offset(lines, name, size):
    return moved(lines, np.where(of_band(lines, name), size, 0.0))


def named(closure, check):
    return [(suspect.band, suspect.line) for suspect in closure.suspects if suspect.check == check]


def test_one_p_line_moved_by_six_sigma_is_named():
    lines = bands(*SIX_BANDS, j_max=12, sigma=SIGMA)
    closure = check_closure(shifted(lines, line(lines, "2-0", "P(7)"), 6 * SIGMA))
    (suspect,) = closure.suspects
    assert (suspect.isotopologue, suspect.band, suspect.line) == ("28Si32S", "2-0", "P(7)")
    assert suspect.check == "differences"
    assert suspect.place == f"bench.csv:{line(lines, '2-0', 'P(7)') + 1}"
    assert suspect.index == line(lines, "2-0", "P(7)")
    assert suspect.size == pytest.approx(6 * SIGMA, rel=1e-6)
    assert suspect.size / suspect.sigma > closure.critical
    assert suspect.rivals == ()
    assert all(abs(loop.z) < 0.01 for loop in closure.loops)


def test_an_offset_of_a_band_leaves_differences_silent_and_loops_loud(rng):
    lines = noisy(bands(*SIX_BANDS, j_max=12, sigma=SIGMA), rng)
    before, after = check_closure(lines), check_closure(offset(lines, "2-1", 3e-3))
    assert before.suspects == ()
    assert named(after, "differences") == []
    assert after.chi2 == pytest.approx(before.chi2, rel=1e-6)
    (suspect,) = after.suspects
    assert (suspect.check, suspect.band, suspect.line, suspect.place) == ("loops", "2-1", "", "bench")
    assert suspect.size == pytest.approx(3e-3, abs=5 * suspect.sigma)
    loud = [loop for loop in after.loops if abs(loop.z) > 20]
    assert loud and all("2-1" in [member.band for member in loop.bands] for loop in loud)


@pytest.mark.slow
def test_false_alarms_of_clean_lists_stay_at_the_stated_rate(rng):
    lines = bands(*SIX_BANDS, "0-0", j_max=8, sigma=SIGMA)
    alarms = sum(bool(check_closure(noisy(lines, rng)).suspects) for _ in range(200))
    # Binomial with 200 trials of 1 %: more than 7 happens once in a thousand.
    assert alarms <= 7
    # With half the uncertainty stated there is an alarm nearly always: the rate above is no numbness.
    bold = replace(lines, sigma=lines.sigma / 2)
    assert sum(bool(check_closure(moved(bold, rng.normal(0, lines.sigma))).suspects) for _ in range(20)) >= 18


@pytest.mark.slow
def test_power_is_that_of_theory_and_the_right_line_is_named(rng):
    lines = bands(*SIX_BANDS, j_max=10, sigma=SIGMA)
    redundancy = adjust(lines, np.arange(len(lines))).redundancy
    candidates = np.flatnonzero(redundancy > 0.5)
    critical = check_closure(lines).critical
    expected, found, right, trials = 0.0, 0, 0, 200
    for _ in range(trials):
        index = int(rng.choice(candidates))
        closure = check_closure(shifted(noisy(lines, rng), index, 6 * SIGMA * rng.choice([-1, 1])))
        indices = [suspect.index for suspect in closure.suspects]
        # w is normal with mean 6 sqrt(redundancy) and unit variance (Baarda 1968, from memory).
        expected += NormalDist().cdf(6 * redundancy[index] ** 0.5 - critical)
        found += bool(indices)
        right += index in indices
    # Three standard deviations of a binomial count.
    assert found == pytest.approx(expected, abs=3 * (expected * (1 - expected / trials)) ** 0.5)
    assert right >= 0.97 * found


@pytest.mark.slow
def test_nine_sigma_are_named_in_nearly_all_cases(rng):
    # Mean statistic 9 sqrt(0.62) = 7.1 against a critical value of 4.0: missed in one case of a thousand.
    lines = bands(*SIX_BANDS, j_max=10, sigma=SIGMA)
    candidates = np.flatnonzero(adjust(lines, np.arange(len(lines))).redundancy > 0.5)
    right = 0
    for _ in range(100):
        index = int(rng.choice(candidates))
        closure = check_closure(shifted(noisy(lines, rng), index, 9 * SIGMA))
        right += index in [suspect.index for suspect in closure.suspects]
    assert right >= 95


def test_several_wrong_lines_are_named_and_no_other(rng):
    lines = noisy(bands(*SIX_BANDS, j_max=20, sigma=SIGMA), rng)
    # Two neighbours in one band, two lines of one level, and a line of another unit of size altogether.
    wrong = {("2-0", "P(7)"): 4e-3, ("2-0", "P(9)"): -5e-3, ("3-1", "R(4)"): 2e-3, ("3-2", "R(4)"): 2e-3}
    wrong |= {("1-0", "R(15)"): 1.7}
    shift = np.zeros(len(lines))
    for (name, label), size in wrong.items():
        shift[line(lines, name, label)] = size
    closure = check_closure(moved(lines, shift))
    assert {(suspect.band, suspect.line) for suspect in closure.suspects} == set(wrong)
    for suspect in closure.suspects:
        assert suspect.size == pytest.approx(wrong[suspect.band, suspect.line], abs=4.5 * suspect.sigma)
        assert suspect.rivals == ()
    # Loops rest on the lines that are left.
    assert all(abs(loop.z) < 4 for loop in closure.loops)


def test_lines_that_cannot_be_told_apart_are_all_named():
    # Bands that share the lower levels only: R(6) and P(8) enter no other difference than their own.
    lines = bands("1-0", "2-0", "3-0", j_max=12, sigma=SIGMA)
    closure = check_closure(shifted(lines, line(lines, "2-0", "P(8)"), 20 * SIGMA))
    assert {(suspect.band, suspect.line) for suspect in closure.suspects} == {("2-0", "P(8)"), ("2-0", "R(6)")}
    by_line = {suspect.line: suspect for suspect in closure.suspects}
    assert by_line["P(8)"].rivals == (f"28Si32S 2-0 R(6) (bench.csv:{line(lines, '2-0', 'R(6)') + 1})",)
    assert by_line["P(8)"].size == pytest.approx(-by_line["R(6)"].size)
    # With two bands, four lines make one comparison.
    lines = bands("1-0", "2-0", j_max=12, sigma=SIGMA)
    closure = check_closure(shifted(lines, line(lines, "2-0", "P(8)"), 20 * SIGMA))
    assert {suspect.line for suspect in closure.suspects} == {"P(8)", "R(6)"}
    assert {suspect.band for suspect in closure.suspects} == {"1-0", "2-0"}


def test_the_same_transition_in_several_sources_is_compared():
    parts = [bands("1-0", j_max=12, source=Source(name)) for name in ("one", "two", "three")]
    lines = merge(parts)
    index = line(lines, "1-0", "R(5)") + 2 * len(parts[0])
    (suspect,) = check_closure(shifted(lines, index, 20 * SIGMA)).suspects
    assert (suspect.place, suspect.line, suspect.check) == ("three:6", "R(5)", "differences")
    whole = moved(lines, np.where(lines.source == 1, 1e-3, 0.0))
    (suspect,) = check_closure(whole).suspects
    assert (suspect.place, suspect.band, suspect.check) == ("two", "1-0", "loops")


def test_a_stated_offset_is_allowed_for_and_a_free_one_excuses_all():
    def lines(prior):
        first = bands("1-0", "2-0", "2-1", j_max=12, source=Source("one"))
        second = bands("2-0", j_max=12, source=Source("two", offset=prior))
        return moved(merge([first, second]), np.repeat([0.0, 2e-3], [len(first), len(second)]))

    (suspect,) = check_closure(lines(None)).suspects
    assert (suspect.place, suspect.band) == ("two", "2-0")
    for prior in (2e-3, float("inf")):
        closure = check_closure(lines(prior))
        assert closure.suspects == ()
        sigmas = [loop.sigma for loop in closure.loops if "two" in {member.source for member in loop.bands}]
        # The closure contains the offset once; the lines' own share is 1e-4 / sqrt(12).
        assert sigmas == [pytest.approx(prior, rel=1e-3)]


def test_an_offset_shared_by_a_source_counts_as_often_as_the_loop_does():
    # (2-0) - (1-0) - (2-1) all from one source: the shared offset o leaves -o, whatever the order.
    lines = bands("1-0", "2-0", "2-1", j_max=12, source=Source("one", offset=1e-3))
    closure = check_closure(moved(lines, 1e-3))
    (loop,) = closure.loops
    assert closure.suspects == ()
    assert abs(loop.closure) == pytest.approx(1e-3, rel=1e-4)
    assert loop.sigma == pytest.approx(1e-3, rel=1e-2)


def test_a_stated_scale_error_is_allowed_for(rng):
    def lines(prior):
        parts = [
            bands("1-0", "2-0", "2-1", j_max=25, source=Source("one")),
            bands("2-0", j_max=25, source=Source("two", scale=prior)),
        ]
        joint = noisy(merge(parts), rng)
        return moved(joint, np.where(joint.source == 1, 1e-5 * joint.position, 0.0))

    assert check_closure(lines(None)).suspects != ()
    assert check_closure(lines(1e-5)).suspects == ()
    assert check_closure(lines(float("inf"))).suspects == ()


def test_excluded_lines_take_no_part():
    lines = bands(*SIX_BANDS, j_max=12, sigma=SIGMA)
    index = line(lines, "3-1", "R(3)")
    wrong = shifted(lines, index, 1.0)
    assert [suspect.index for suspect in check_closure(wrong).suspects] == [index]
    closure = check_closure(wrong.excluded(np.arange(len(lines)) == index, "blend"))
    assert closure.suspects == ()
    assert closure.lines_tested + closure.lines_unchecked == len(lines) - 1


def test_isotopologues_are_checked_apart():
    light = bands(*SIX_BANDS, j_max=10)
    heavy = bands(*SIX_BANDS, j_max=10, isotopologue="30Si32S", constants={(1, 0): 640.0, (0, 1): 0.39})
    lines = merge([light, heavy])
    index = len(light) + line(heavy, "2-0", "R(3)")
    (suspect,) = check_closure(shifted(lines, index, 2e-3)).suspects
    assert (suspect.isotopologue, suspect.index) == ("30Si32S", index)


def test_a_single_band_and_an_empty_list_leave_nothing_to_test():
    single = check_closure(bands("1-0", j_max=12))
    assert (single.suspects, single.loops, single.lines_tested, single.lines_unchecked) == ((), (), 0, 25)
    empty = bands("1-0", j_max=3).subset(slice(0, 0))
    assert check_closure(empty).lines_tested == 0


def test_stated_uncertainties_that_do_not_hold_are_reported_as_such(rng):
    lines = bands(*SIX_BANDS, j_max=100, sigma=SIGMA)
    closure = check_closure(moved(lines, rng.normal(0.0, 20 * SIGMA, len(lines))))
    assert closure.overflowing == ("28Si32S",)
    # 20^2 within the scatter of some 240 degrees of freedom.
    assert closure.chi2 / closure.redundancy == pytest.approx(400, rel=0.4)


def test_lines_without_uncertainty_are_refused():
    lines = bands("1-0", "2-0", j_max=5)
    sigma = lines.sigma.copy()
    sigma[3] = 0.0
    with pytest.raises(UsageError, match=r"bench.csv:4: a finite position and a positive uncertainty .* \+- 0.0"):
        check_closure(replace(lines, sigma=sigma))
    with pytest.raises(UsageError, match="'false_alarms' must be between 0 and 1"):
        check_closure(lines, false_alarms=1.0)


@pytest.fixture(scope="module")
def hitran_lines(shared_reference):
    """The published list of carbon monoxide, six isotopologues, as read."""
    request = SourceRequest("hitran", (shared_reference / "co_hitran2016_6iso.par",), format="hitran")
    return read_source(request).lines


def test_the_one_line_out_of_place_in_a_published_list(hitran_lines):
    # HITRAN2016, I. E. Gordon et al., J. Quant. Spectrosc. Radiat. Transf. 203, 3 (2017).
    (suspect,) = check_closure(hitran_lines).suspects
    assert (suspect.isotopologue, suspect.band, suspect.line) == ("13C16O", "3-0", "R(34)")
    # Independent of any network: in a smooth branch third differences are small and even; a line that is off by x
    # leaves x (1, -3, 3, -1) in four of them, which the neighbours (a factor 10 smaller) do not hide.
    branch = np.isin(np.arange(len(hitran_lines)), np.flatnonzero(of_band(hitran_lines, "3-0")))
    branch &= (hitran_lines.isotopologue == hitran_lines.isotopologue[suspect.index]) & (
        hitran_lines.j_upper > hitran_lines.j_lower
    )
    order = np.argsort(hitran_lines.j_lower[branch])
    j, position = hitran_lines.j_lower[branch][order], hitran_lines.position[branch][order]
    first = int(np.flatnonzero(j == 31)[0])
    third = np.diff(position[first : first + 7], n=3)
    assert third @ [1, -3, 3, -1] / 20 == pytest.approx(suspect.size, abs=2 * suspect.sigma)
