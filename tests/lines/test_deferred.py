"""Lines that are read on first use behave as lines that are there."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from dunhamfit.errors import UsageError
from dunhamfit.lines.deferred import DeferredLines, Part, append_lines
from dunhamfit.lines.line_list import LineList, Source, line_columns, merge


def bands(*names: str, source: Source | None = None, isotopologue: str = "28Si32S") -> LineList:
    """41 lines of each band, positions made up: only their order and names matter here."""
    levels = []
    for name in names:
        upper, lower = (int(v) for v in name.split("-"))
        levels += [(upper, j + step, lower, j) for j in range(21) for step in (1, -1) if j + step >= 0]
    v_upper, j_upper, v_lower, j_lower = np.array(levels).T
    zero = np.zeros(len(j_lower), dtype=int)
    return LineList(
        position=600.0 * (v_upper - v_lower) + 0.8 * (j_upper - j_lower) * j_lower,
        sigma=np.full(len(zero), 1e-4),
        v_upper=v_upper,
        j_upper=j_upper,
        v_lower=v_lower,
        j_lower=j_lower,
        isotopologue=zero,
        source=zero,
        file=zero,
        row=np.arange(1, len(zero) + 1),
        exclusion=zero,
        isotopologues=(isotopologue,),
        sources=(source or Source("bench", ("bench.csv",)),),
    )


def deferred(lines: LineList, reads: list[int]) -> DeferredLines:
    """`lines` in two parts of one source; `reads` takes note of every reading."""

    def part(number, stretch):
        chosen = lines.subset(stretch)

        def read():
            reads.append(number)
            return {item.name: getattr(chosen, item.name) for item in line_columns()}

        return Part(0, len(chosen), read, key=number)

    return DeferredLines.of(
        [part(1, slice(0, 10)), part(2, slice(10, None))],
        isotopologues=lines.isotopologues,
        sources=lines.sources,
        reasons=lines.reasons,
    )


def assert_equal(first: LineList, second: LineList) -> None:
    for item in line_columns():
        one, other = getattr(first, item.name), getattr(second, item.name)
        assert one.dtype == other.dtype and np.array_equal(one, other), item.name
        assert not one.flags.writeable
    assert (first.isotopologues, first.sources, first.reasons) == (
        second.isotopologues,
        second.sources,
        second.reasons,
    )


@pytest.fixture
def lines() -> LineList:
    plain = bands("1-0", "2-1")
    return plain.excluded(plain.j_lower == 3, "blend")


def test_nothing_is_read_before_it_is_asked_for(lines):
    reads = []
    late = deferred(lines, reads)
    assert len(late) == len(lines) and not reads
    assert np.array_equal(late.used, lines.used)
    assert reads == [1, 2]
    assert_equal(late, lines)
    assert reads == [1, 2]


def test_derived_lists_hold_their_columns(lines):
    late = deferred(lines, [])
    for change in (
        lambda item: item.subset(item.v_upper == 1),
        lambda item: item.excluded(item.j_lower > 8, "beyond"),
        lambda item: replace(item, position=item.position + 1),
    ):
        assert_equal(change(late), change(lines))
        assert change(late).parts == ()
    assert late.label(5) == lines.label(5) and late.place(5) == lines.place(5)


def test_other_attributes_do_not_exist(lines):
    with pytest.raises(AttributeError, match="no attribute 'intensity'"):
        deferred(lines, []).intensity  # noqa: B018


def test_lines_are_appended_without_reading(lines):
    reads = []
    late = deferred(lines, reads)
    new = bands("3-1", source=Source("new"), isotopologue="29Si32S").excluded(np.arange(41) == 7, "noise")
    both = append_lines(late, new)
    assert not reads and len(both) == len(lines) + len(new)
    assert [part.key for part in both.parts] == [1, 2, None]
    assert_equal(both, merge([lines, new]))
    assert_equal(append_lines(lines, new), merge([lines, new]))
    assert_equal(append_lines(both, new), merge([lines, new, new]))


def test_lines_of_one_source_stand_together(lines):
    first, second = bands("1-0", source=Source("a")), bands("1-0", source=Source("b"))
    mixed = merge([first, second]).subset(np.argsort(np.tile(np.arange(len(first)), 2), kind="stable"))
    both = append_lines(deferred(lines, []), mixed)
    assert_equal(both, merge([lines, first, second]))


def test_two_sources_of_one_name(lines):
    with pytest.raises(UsageError, match="two sources are named 'bench'"):
        append_lines(deferred(lines, []), bands("1-0", source=Source("bench", offset=1.0)))
