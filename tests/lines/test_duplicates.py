"""Rows of one source that stand for the same line."""

import numpy as np
import pytest

HEADER = "position,uncertainty,v_upper,v_lower,label\n"


def test_the_doubled_file_is_refused(read_text):
    """A doubled list shrinks every error bar by the square root of 1/2, so no row of it may pass unseen."""
    rows = "".join(f"{2147 + 3.7 * j:.4f},0.01,1,0,R({j})\n" for j in range(30))
    reading = read_text(HEADER + rows + rows)
    assert len(reading.faults) == 30
    assert (reading.rows, reading.used, reading.rejected) == (60, 30, 30)
    assert str(reading.faults[4]) == (
        "lines.csv:36: 12C16O 1-0 R(4) repeats lines.csv:6 (same source, line and value), "
        "keeping both would shrink error bars by up to 1.41, remove one"
    )


def test_each_repeat_is_held_against_its_own_value(read_text):
    rows = ["2147.1", "2147.2", "2147.2", "2147.1", "2147.3"]
    reading = read_text(HEADER + "".join(f"{nu},0.01,1,0,R(0)\n" for nu in rows))
    assert [fault.what for fault in reading.faults] == [
        "12C16O 1-0 R(0) stands at lines.csv:2 too and the values differ by 7.1 sigma",
        "12C16O 1-0 R(0) repeats lines.csv:3 (same source, line and value)",
        "12C16O 1-0 R(0) repeats lines.csv:2 (same source, line and value)",
        "12C16O 1-0 R(0) stands at lines.csv:2 too and the values differ by 14 sigma",
    ]
    assert reading.used == 1


def test_both_values_where_the_source_says_so(read_text):
    rows = ["2147.1", "2147.2", "2147.2"]
    reading = read_text(HEADER + "".join(f"{nu},0.01,1,0,R(0)\n" for nu in rows), repeats="both")
    assert reading.lines.position.tolist() == [2147.1, 2147.2]
    assert [fault.what for fault in reading.faults] == [
        "12C16O 1-0 R(0) repeats lines.csv:3 (same source, line and value)"
    ]


def test_lines_that_differ_in_one_number_are_no_repeats(read_text):
    header = "position,uncertainty,v_upper,v_lower,label,isotopologue\n"
    rows = ["1,0,R(0),12C16O", "2,1,R(0),12C16O", "2,0,R(0),12C16O", "1,0,R(1),12C16O", "1,0,P(1),12C16O"]
    rows.append("1,0,R(0),13C16O")
    assert read_text(header + "".join(f"2147.1,0.01,{row}\n" for row in rows)).faults == ()


def test_faulty_and_left_out_rows_are_not_held_against_others(read_text):
    rows = "2147.1,0,1,0,R(0)\n2147.1,0.01,1,0,R(0)\n"
    assert len(read_text(HEADER + rows).faults) == 1


@pytest.mark.parametrize("both", [False, True])
def test_against_a_plain_search(both, read_text, rng):
    """The same answer as a loop over all earlier rows."""
    j = rng.integers(0, 4, 60)
    nu = 2147 + rng.integers(0, 3, 60) / 10
    rows = "".join(f"{x:.1f},0.01,1,0,R({k})\n" for x, k in zip(nu, j, strict=True))
    expected = []
    for i in range(60):
        earlier = [k for k in range(i) if j[k] == j[i]]
        if any(nu[k] == nu[i] for k in earlier) or (earlier and not both):
            expected.append(i + 2)
    reading = read_text(HEADER + rows, repeats="both" if both else "refuse")
    assert [fault.line for fault in reading.faults] == expected
    assert np.isin(reading.lines.row, expected).sum() == 0
