"""The line list: immutable columns, exclusions with a reason, merging by name."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from dunhamfit.errors import UsageError
from dunhamfit.lines.line_list import LineList, Source, branch_label, line_columns, merge


def make(rows, *, isotopologues=("28Si32S",), source="a", files=("a.csv",)):
    """A list of lines from (position, v', J', v'', J'', isotopologue code)."""
    columns = np.array(rows, dtype=float).reshape(-1, 6).T
    count = columns.shape[1]
    return LineList(
        position=columns[0],
        sigma=np.full(count, 1e-4),
        v_upper=columns[1],
        j_upper=columns[2],
        v_lower=columns[3],
        j_lower=columns[4],
        isotopologue=columns[5],
        source=np.zeros(count),
        file=np.zeros(count),
        row=np.arange(1, count + 1),
        exclusion=np.zeros(count),
        isotopologues=isotopologues,
        sources=(Source(source, files),),
    )


ROWS = [(740.0, 1, 3, 0, 2, 0), (735.0, 1, 3, 0, 4, 0), (12.5, 0, 21, 0, 20, 0)]


def test_columns_cannot_be_written():
    lines = make(ROWS)
    for item in line_columns():
        with pytest.raises(ValueError, match="read-only"):
            getattr(lines, item.name)[0] = 0


def test_the_callers_arrays_stay_the_callers():
    position = np.array([1.0])
    lines = make([(1.0, 1, 1, 0, 0, 0)])
    lines = LineList(**{item.name: getattr(lines, item.name) for item in line_columns()} | {"position": position})
    position[0] = 5.0
    assert lines.position[0] == 1.0


def test_columns_of_unequal_length_are_refused():
    lines = make(ROWS)
    columns = {item.name: getattr(lines, item.name) for item in line_columns()} | {"sigma": [1.0]}
    with pytest.raises(UsageError, match=r"column 'sigma' must have shape \(3,\) \(got \(1,\)\)"):
        LineList(**columns)


def test_labels_and_places():
    lines = make(ROWS)
    assert [lines.label(i) for i in range(3)] == ["28Si32S 1-0 R(2)", "28Si32S 1-0 P(4)", "28Si32S 0-0 R(20)"]
    assert lines.place(1) == "a.csv:2"
    assert make(ROWS, files=()).place(1) == "a:2"
    assert [branch_label(2, 0), branch_label(0, 2), branch_label(5, 1)] == ["S(0)", "O(2)", "J=5-1"]


def test_exclusion_is_a_mask_with_a_reason():
    lines = make(ROWS)
    first = lines.excluded([True, False, False], "blend")
    second = first.excluded([True, True, False], "weak")
    assert lines.used.tolist() == [True] * 3
    assert second.used.tolist() == [False, False, True]
    assert [second.reasons[code] for code in second.exclusion] == ["blend", "weak", ""]
    with pytest.raises(UsageError, match="an exclusion needs a reason"):
        lines.excluded([True] * 3, "")


def test_a_subset_keeps_the_tables():
    lines = make(ROWS).excluded([True, False, False], "blend").subset([2, 0])
    assert lines.position.tolist() == [12.5, 740.0]
    assert lines.used.tolist() == [True, False]
    assert lines.reasons == ("", "blend")


ORDERS = st.permutations(["28Si32S", "29Si32S", "30Si32S"])


@given(ORDERS, ORDERS)
def test_merging_matches_names_whatever_their_codes(first, second):
    rows = [(700.0 + code, 1, 1, 0, 0, code) for code in range(3)]
    parts = [make(rows, isotopologues=tuple(first)), make(rows, isotopologues=tuple(second), source="b")]
    merged = merge(parts)
    names = [merged.isotopologues[code] for code in merged.isotopologue]
    assert names == [*first, *second]
    assert [merged.sources[code].name for code in merged.source] == ["a"] * 3 + ["b"] * 3
    assert merged.position.tolist() == [700, 701, 702] * 2


def test_merging_keeps_reasons():
    one = make(ROWS).excluded([True, False, False], "blend")
    two = make(ROWS, source="b").excluded([False, True, True], "weak").excluded([True, False, False], "blend")
    merged = merge([one, two])
    assert [merged.reasons[code] for code in merged.exclusion] == ["blend", "", "", "blend", "weak", "weak"]


def test_merging_refuses_two_sources_of_one_name():
    with pytest.raises(UsageError, match="two sources are named 'a'; give each source a name of its own"):
        merge([make(ROWS), make(ROWS, files=("other.csv",))])
    with pytest.raises(UsageError, match="no line lists to merge"):
        merge([])


def test_the_same_source_twice_is_one_source():
    assert len(merge([make(ROWS), make(ROWS)]).sources) == 1
