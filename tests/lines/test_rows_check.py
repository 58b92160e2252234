"""Every fault of a row, word for word."""

import pytest

from dunhamfit.errors import UsageError

HEADER = "position,uncertainty,v_upper,v_lower,j_upper,j_lower,isotopologue\n"
GOOD = "2147.0811,0.0001,1,0,1,0,12C16O\n"

# One bad row each, at line 3 of the file, and what is said of it.
FAULTS = {
    "2154.6,0.00,1,0,3,2,12C16O": (
        "uncertainty 0 would give infinite weight, tables often print tiny values as 0.00, "
        "give the value, or leave it blank and set uncertainty for the source"
    ),
    "2154.6,-0.1,1,0,3,2,12C16O": (
        "uncertainty -0.1 is negative, an uncertainty is a positive number, correct the sign or the column map"
    ),
    "2154.6,,1,0,3,2,12C16O": (
        "uncertainty is blank, a line without an uncertainty has no weight, "
        "give the value or set uncertainty for the source"
    ),
    "2154.6,n/a,1,0,3,2,12C16O": (
        'uncertainty "n/a" is missing, a line without an uncertainty has no weight, '
        "give the value or set uncertainty for the source"
    ),
    "2154.6,inf,1,0,3,2,12C16O": (
        'uncertainty "inf" is not finite, a finite number was expected, give the value or remove the row'
    ),
    "2154.6,0.1 cm-1,1,0,3,2,12C16O": (
        'uncertainty "0.1 cm-1" is not a number, a number such as 2143.2711 was expected, '
        "correct the text or the column map"
    ),
    "NaN,0.1,1,0,3,2,12C16O": (
        'position "NaN" is not finite, a finite number was expected, give the value or remove the row'
    ),
    "-,0.1,1,0,3,2,12C16O": (
        'position "-" is missing, it stands for a missing value, give the value or remove the row'
    ),
    ",0.1,1,0,3,2,12C16O": "position is blank, every line needs this value, give the value or remove the row",
    '"2154,6",0.1,1,0,3,2,12C16O': (
        'position "2154,6" has a comma, the decimal sign of the source is ".", '
        'set decimal = "," if this is a decimal comma'
    ),
    "-2154.6,0.1,1,0,3,2,12C16O": (
        "position -2154.6 is not positive, a line is the upper level minus the lower one, "
        "correct the value, or exchange the upper and the lower level"
    ),
    "0,0.1,1,0,3,2,12C16O": (
        "position 0 is not positive, a line is the upper level minus the lower one, "
        "correct the value, or exchange the upper and the lower level"
    ),
    "2154.6,0.1,1,0,-2,-3,12C16O": ("J'=-2, J''=-3, J must be 0, 1, 2, ..., if this column is m, declare it as m"),
    "2154.6,0.1,1,0,-1,0,12C16O": "J'=-1, J must be 0, 1, 2, ..., correct it",
    "2154.6,0.1,1,0,3.5,2.5,12C16O": (
        "J'=3.5, J''=2.5, half-integer J needs an open-shell model, which this is not, correct it or leave the line out"
    ),
    "2154.6,0.1,1,-1,3,2,12C16O": "v''=-1, v must be 0, 1, 2, ..., correct it or the column map",
    "2154.6,0.1,1.5,0,3,2,12C16O": "v'=1.5, v must be 0, 1, 2, ..., correct it or the column map",
    "2154.6,0.1,2154,0,3,2,12C16O": (
        "v'=2154 > 500, no molecule has so many bound levels, correct it or the column map"
    ),
    "2154.6,0.1,1,0,7,7,12C16O": (
        "Q(7) has dJ=0, forbidden for an electric-dipole 1Sigma line, "
        "correct it or leave the line out; quadrupole lines are not taken"
    ),
    "2154.6,0.1,1,0,5,2,12C16O": (
        "J=5-2 has dJ=3, forbidden for an electric-dipole 1Sigma line, "
        "correct it or leave the line out; quadrupole lines are not taken"
    ),
    "2154.6,0.1,1,0,413,412,12C16O": (
        "J=413 > 250, so high a J looks like a typing error, correct it, or set allow_high_j = true for the source"
    ),
    "2147.08,0.1,0,1,0,1,12C16O": (
        "v'=0, v''=1 with a positive position 2147.08, the upper level would lie below the lower one, "
        "upper and lower columns exchanged? swapping gives 1-0 R(0); 1 of 2 rows show this"
    ),
    "23.07,0.1,0,0,5,6,12C16O": (
        "v'=0, v''=0, J'=5, J''=6 with a positive position 23.07, "
        "the upper level would lie below the lower one, "
        "upper and lower columns exchanged? swapping gives 0-0 R(5); 1 of 2 rows show this"
    ),
    "2154.6,0.1,1,0,3,2,C13O16": (
        'isotopologue "C13O16" cannot be used, "C13O16" is not recognised; did you mean 13C16O? write mass '
        "numbers before the symbols and the charge last, as in 28Si32S or 12C1H+, "
        "correct the name or the column map"
    ),
    "2154.6 0.1,1,0,3,2,12C16O": (
        '6 columns, expected 7, the text is "2154.6 0.1,1,0,3,2,12C16O", '
        "mixed blanks and comma? correct the row or make it a comment"
    ),
    "2154.6": '1 column, expected 7, the text is "2154.6", correct the row or make it a comment',
    '"2154.6,0.1,1,0,3,2,12C16O': (
        'a quote does not close, the text is ""2154.6,0.1,1,0,3,2,12C16O", correct the row or make it a comment'
    ),
    "\x1b[31m2154.6,0.1,1,0,3,2,12C16O": (
        'position "\\x1b[31m2154.6" is not a number, a number such as 2143.2711 was expected, '
        "correct the text or the column map"
    ),
    "2147.0811,0.0001,1,0,1,0,12C16O": (
        "12C16O 1-0 R(0) repeats lines.csv:2 (same source, line and value), "
        "keeping both would shrink error bars by up to 1.41, remove one"
    ),
    "2147.0819,0.0001,1,0,1,0,12C16O": (
        "12C16O 1-0 R(0) stands at lines.csv:2 too and the values differ by 5.7 sigma, "
        "a source has one value of a line, "
        'which is the correction? remove the other, or set repeats = "both" if both were measured'
    ),
}


@pytest.mark.parametrize("row", FAULTS)
def test_the_message_of_each_fault(row, read_text):
    reading = read_text(HEADER + GOOD + row + "\n", isotopologue=None)
    assert [str(fault) for fault in reading.faults] == [f"lines.csv:3: {FAULTS[row]}"]
    assert (reading.rows, reading.used, reading.rejected) == (2, 1, 1)


def test_all_of_them_in_one_pass(read_text):
    """As many planted faults as messages, each at its own line, none hidden by another."""
    rows = [row for row in FAULTS if "0.0001,1,0,1,0" not in row]
    reading = read_text(HEADER + GOOD + "\n".join(rows) + "\n", isotopologue=None)
    assert [fault.line for fault in reading.faults] == [number + 3 for number in range(len(rows))]
    assert (reading.rows, reading.used, reading.rejected) == (len(rows) + 1, 1, len(rows))


def test_two_problems_of_one_row_are_both_told(read_text):
    reading = read_text(HEADER + "abc,0,1,0,3,3,12C16O\n", isotopologue=None)
    assert [fault.what for fault in reading.faults] == [
        'position "abc" is not a number',
        "uncertainty 0 would give infinite weight",
        "Q(3) has dJ=0",
    ]
    assert (reading.rows, reading.rejected) == (1, 1)


def test_columns_exchanged_in_every_row(read_text):
    rows = "".join(f"{2147 + j},0.1,0,1,{j},{j + 1},12C16O\n" for j in range(5))
    reading = read_text(HEADER + rows, isotopologue=None)
    assert len(reading.faults) == 5
    assert all(fault.remedy.endswith("5 of 5 rows show this") for fault in reading.faults)


BRANCH_HEADER = "position,uncertainty,v_upper,v_lower,label\n"


@pytest.mark.parametrize(
    ("row", "message"),
    [
        (
            "2143.3,0.1,1,0,P(0)",
            "P(0) does not exist (it needs J'=-1), J in a branch label is the LOWER-state J so P starts at "
            "P(1), if the file counts by m, P lines have m=-J and R lines m=J+1",
        ),
        ("2143.3,0.1,1,0,P(-3)", "J''=-3, J must be 0, 1, 2, ..., if this column is m, declare it as m"),
        (
            "2143.3,0.1,1,0,R(2.5)",
            "J''=2.5, half-integer J needs an open-shell model, which this is not, correct it or leave the line out",
        ),
        (
            "2143.3,0.1,1,0,Q(7)",
            "Q(7) has dJ=0, forbidden for an electric-dipole 1Sigma line, "
            "correct it or leave the line out; quadrupole lines are not taken",
        ),
        (
            "2143.3,0.1,1,0,S(1)",
            "S(1) has dJ=2, forbidden for an electric-dipole 1Sigma line, "
            "correct it or leave the line out; quadrupole lines are not taken",
        ),
        (
            "2143.3,0.1,1,0,T(1)",
            'label "T(1)" is not understood, a label such as R(12) or P(3) was expected, '
            "correct the label or the column map",
        ),
    ],
)
def test_faults_of_labels(row, message, read_text):
    reading = read_text(BRANCH_HEADER + row + "\n")
    assert [str(fault) for fault in reading.faults] == [f"lines.csv:2: {message}"]


@pytest.mark.parametrize(
    ("row", "message"),
    [
        (
            "2143.3,0.1,1,0,0",
            "m=0 is no line, P lines have m=-J'' and R lines m=J''+1, so m is a whole number other than 0, "
            "correct it or the column map",
        ),
        (
            "2143.3,0.1,1,0,2.5",
            "m=2.5 is no line, P lines have m=-J'' and R lines m=J''+1, so m is a whole number other than 0, "
            "correct it or the column map",
        ),
        ("2143.3,0.1,1,0,", "m is blank, every line needs this value, give the value or remove the row"),
    ],
)
def test_faults_of_m(row, message, read_text):
    reading = read_text("position,uncertainty,v_upper,v_lower,m\n" + row + "\n")
    assert [str(fault) for fault in reading.faults] == [f"lines.csv:2: {message}"]


def test_an_unknown_branch_letter(read_text):
    reading = read_text("position,uncertainty,v_upper,v_lower,branch,j_lower\n2143.3,0.1,1,0,X,3\n")
    assert [str(fault) for fault in reading.faults] == [
        'lines.csv:2: branch "X" is not known, P or R was expected, correct the letter or the column map'
    ]


def test_a_full_stop_where_a_comma_is_declared(read_text):
    reading = read_text("position;uncertainty;v_upper;v_lower;m\n2143.3;0,1;1;0;4\n", decimal=",")
    assert [str(fault) for fault in reading.faults] == [
        'lines.csv:2: position "2143.3" has a full stop, the decimal sign of the source is ",", '
        'set decimal = "." or correct the number'
    ]


def test_numbers_that_leave_the_range_of_cm_1(read_text):
    """Doubles end near 1.8e308 and 4.9e-324 (IEEE 754)."""
    text = "position,uncertainty,v_upper,v_lower,m\n1e-310,1e-311,1,0,1\n4.6,1e-330,1,0,2\n"
    assert [fault.what for fault in read_text(text, unit="um").faults] == [
        "position 1e-310 is out of range",
        "uncertainty 1e-311 is out of range",
        "uncertainty 0 would give infinite weight",
    ]
    text = "position,uncertainty,v_upper,v_lower,m\n64e6,5e-324,1,0,1\n"
    assert [fault.what for fault in read_text(text, unit="MHz").faults] == ["uncertainty 4.94066e-324 is out of range"]


def test_high_j_can_be_allowed(read_text):
    row = "2154.6,0.1,1,0,{},{},12C16O\n"
    assert read_text(HEADER + row.format(413, 412), isotopologue=None, allow_high_j=True).faults == ()
    for j in ("5002", "1e300"):
        reading = read_text(HEADER + row.format(j, j), isotopologue=None, allow_high_j=True)
        assert [fault.what for fault in reading.faults] == [f"J={float(j):g} > 5000"]


def test_the_check_of_the_caller_decides_on_isotopologues(read_text):
    def check(name):
        if name == "11C17N":
            raise UsageError("11C17N is not carbon monoxide: its atoms are C and N.")
        return name.replace("CO", "12C16O")

    text = HEADER + "2147.0811,0.0001,1,0,1,0,CO\n2154.6,0.1,1,0,3,2,11C17N\n2150.9,0.1,1,0,2,1,12C16O\n"
    reading = read_text(text, isotopologue=None, check=check)
    assert [str(fault) for fault in reading.faults] == [
        'lines.csv:3: isotopologue "11C17N" cannot be used, 11C17N is not carbon monoxide: its atoms are C '
        "and N, correct the name or the column map"
    ]
    assert reading.lines.label(0) == "12C16O 1-0 R(0)"
    assert reading.lines.label(1) == "12C16O 1-0 R(1)"
    with pytest.raises(UsageError, match="source 'test': 11C17N is not carbon monoxide"):
        read_text(text, isotopologue="11C17N", check=check)
