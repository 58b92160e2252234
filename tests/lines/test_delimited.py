"""Delimited text: the same lines in every notation give the same columns.

The positions are those of 12C16O 1-0 R(0) to R(3) in the tables of A. Maki, Infrared and
far-infrared absorption frequency standards, CRC Handbook of Chemistry and Physics.
"""

import pytest

POSITIONS = [2147.081132, 2150.856006, 2154.595581, 2158.299710]
SIGMA = 1e-6

GOLDEN = {
    "commas, header in our words": (
        """position,uncertainty,v_upper,v_lower,j_upper,j_lower
2147.081132,0.000001,1,0,1,0
2150.856006,0.000001,1,0,2,1
2154.595581,0.000001,1,0,3,2
2158.299710,0.000001,1,0,4,3
""",
        {},
    ),
    "commas, branch, header of the table's own, comments, empty lines, blanks around": (
        """# a comment
v', v'', br, J, nu, unc

! another
 1, 0, R, 0, 2147.081132, 1e-6
1,0, R,1,2150.856006,1e-6
1,0,r,2,2154.595581,1e-6

1,0,R,3,2158.299710,1e-6
,,,,,
""",
        {
            "columns": {
                "position": "nu",
                "uncertainty": "unc",
                "v_upper": "v'",
                "v_lower": "v''",
                "branch": "br",
                "j_lower": "J",
            }
        },
    ),
    "tabs, no header, column numbers, labels": (
        "R(0)\t2147.081132\t1e-6\t1\t0\nR(1)\t2150.856006\t1e-6\t1\t0\n"
        "R 2\t2154.595581\t1e-6\t1\t0\nR3\t2158.299710\t1e-6\t1\t0\n",
        {"columns": {"label": 1, "position": 2, "uncertainty": 3, "v_upper": 4, "v_lower": 5}},
    ),
    "blanks, m, uncertainty in parentheses": (
        """ 1 0  1  2147.081132(1)
 1 0  2  2150.856006(1)
 1 0  3\t2154.595581(1)
 1 0  4  2158.299710(1)
""",
        {"columns": {"v_upper": 1, "v_lower": 2, "m": 3, "position": 4}},
    ),
    "semicolons, decimal comma, byte-order mark, carriage returns": (
        "\ufeffposition;uncertainty;v_upper;v_lower;label\r\n2147,081132;0,000001;1;0;R(0)\r\n"
        "2150,856006;0,000001;1;0;R(1)\r\n2154,595581;0,000001;1;0;R(2)\r\n2158,299710;0,000001;1;0;R(3)\r\n",
        {"decimal": ","},
    ),
    "blanks, decimal comma": (
        "1 0 1 2147,081132(1)\n1 0 2 2150,856006(1)\n1 0 3 2154,595581(1)\n1 0 4 2158,299710(1)\n",
        {"decimal": ",", "columns": {"v_upper": 1, "v_lower": 2, "m": 3, "position": 4}},
    ),
    "groups of digits: blank, thin space, no-break space": (
        "position,uncertainty,v_upper,v_lower,m\n2 147.081 132,0.000 001,1,0,1\n"
        "2\u2009150.856\u2009006,0.000\u2009001,1,0,2\n2\u00a0154.595\u00a0581,1e\u22126,1,0,3\n"
        "2\u202f158.299\u202f710,1e-6,1,0,4\n",
        {},
    ),
    "thin spaces in a table set with blanks": (
        "1 0 1 2147.081\u2009132(1)\n1 0 2 2\u2009150.856\u2009006(1)\n1 0 3  2154.595581(1) \n1 0 4 2158.299710(1)\n",
        {"columns": {"v_upper": 1, "v_lower": 2, "m": 3, "position": 4}},
    ),
    "quotes, and lines ended by carriage returns alone": (
        '"position","uncertainty","v_upper","v_lower","label"\r"2147.081132",1e-6,1,0,"R(0)"\r'
        "2150.856006,1e-6,1,0,R(1)\r2154.595581,1e-6,1,0,R(2)\r2158.299710,1e-6,1,0,R(3)",
        {},
    ),
    "comment marks of the source": (
        "% first\nC second\n2147.081132 1e-6 1 0 R(0)\n2150.856006 1e-6 1 0 R(1)\n"
        "2154.595581 1e-6 1 0 R(2)\n2158.299710 1e-6 1 0 R(3)\n",
        {
            "comment": ("%", "C"),
            "columns": {"position": 1, "uncertainty": 2, "v_upper": 3, "v_lower": 4, "label": 5},
        },
    ),
}


@pytest.mark.parametrize("name", GOLDEN)
def test_every_notation_gives_the_same_lines(name, read_text):
    text, options = GOLDEN[name]
    reading = read_text(text, **options)
    assert reading.faults == ()
    assert reading.notices == ()
    lines = reading.lines
    assert lines.position.tolist() == POSITIONS
    assert lines.sigma.tolist() == pytest.approx([SIGMA] * 4, rel=1e-15)
    assert lines.v_upper.tolist() == [1] * 4
    assert lines.v_lower.tolist() == [0] * 4
    assert lines.j_upper.tolist() == [1, 2, 3, 4]
    assert lines.j_lower.tolist() == [0, 1, 2, 3]
    assert lines.isotopologues == ("12C16O",)


def test_rows_are_numbered_as_an_editor_numbers_them(read_text):
    text, options = GOLDEN["commas, branch, header of the table's own, comments, empty lines, blanks around"]
    assert read_text(text, **options).lines.row.tolist() == [5, 6, 7, 9]
    assert read_text(text, **options).lines.place(0) == "lines.csv:5"


def test_m_counts_p_lines_downwards(read_text):
    """m = -J'' in the P branch and J'' + 1 in the R branch (common practice)."""
    reading = read_text("position,uncertainty,v_upper,v_lower,m\n2131.63,1,1,0,-3\n2158.3,1,1,0,4\n")
    assert [reading.lines.label(i) for i in (0, 1)] == ["12C16O 1-0 P(3)", "12C16O 1-0 R(3)"]


def test_negative_numbers_with_the_minus_of_typesetters(read_text):
    reading = read_text("position,uncertainty,v_upper,v_lower,m\n2131.63,1,1,0,−3\n")
    assert reading.lines.label(0) == "12C16O 1-0 P(3)"


def test_footnote_marks_are_said(read_text):
    reading = read_text("position,uncertainty,v_upper,v_lower,label\n2131.63*,1,1,0,P(3)*\n2158.3a,1,1,0,R(3)\n")
    assert reading.faults == ()
    assert reading.notices == ("lines.csv: footnote marks were passed over: * (2), a (1)",)


def test_isotopologues_of_a_column(read_text):
    text = """position,uncertainty,v_upper,v_lower,label,isotopologue
2147.08,0.1,1,0,R(0),12C16O
2099.7,0.1,1,0,R(0),13C16O
2150.9,0.1,1,0,R(1),
"""
    lines = read_text(text).lines
    assert [lines.label(i) for i in range(3)] == ["12C16O 1-0 R(0)", "13C16O 1-0 R(0)", "12C16O 1-0 R(1)"]
    blank = read_text(text, isotopologue=None)
    assert [str(fault) for fault in blank.faults] == [
        "lines.csv:4: isotopologue is blank, every line belongs to one, "
        "give the name or set isotopologue for the source"
    ]


def test_the_uncertainty_of_the_source_serves_lines_without_their_own(read_text):
    text = "position,uncertainty,v_upper,v_lower,label\n2147.08,0.1,1,0,R(0)\n"
    text += "2150.9,,1,0,R(1)\n2154.6,-,1,0,R(2)\n"
    reading = read_text(text, uncertainty=0.5)
    assert reading.lines.sigma.tolist() == [0.1, 0.5, 0.5]
    assert reading.notices == ("lines.csv: lines without an uncertainty that took the 0.5 cm-1 of the source: 2",)
    assert [str(fault) for fault in read_text(text).faults] == [
        "lines.csv:3: uncertainty is blank, a line without an uncertainty has no weight, "
        "give the value or set uncertainty for the source",
        'lines.csv:4: uncertainty "-" is missing, a line without an uncertainty has no weight, '
        "give the value or set uncertainty for the source",
    ]


def test_no_uncertainty_anywhere_is_one_fault(read_text):
    text = "position,v_upper,v_lower,label\n2147.08,1,0,R(0)\n2150.9,1,0,R(1)\n"
    assert read_text(text, uncertainty=0.5).lines.sigma.tolist() == [0.5, 0.5]
    assert read_text(text, uncertainty=0.5).notices == ()
    reading = read_text(text)
    assert [str(fault) for fault in reading.faults] == [
        "lines.csv: no uncertainties, a line without an uncertainty has no weight, "
        "set uncertainty for the source or map a column to it"
    ]
    assert reading.rejected == 2
    mixed = read_text("position,v_upper,v_lower,label\n2147.08(1),1,0,R(0)\n2150.9,1,0,R(1)\n")
    assert [fault.line for fault in mixed.faults] == [3]


def test_two_uncertainties_of_one_line(read_text):
    text = "position,uncertainty,v_upper,v_lower,label\n2147.08(10),{},1,0,R(0)\n"
    assert read_text(text.format("0.10")).lines.sigma.tolist() == [0.1]
    assert read_text(text.format("")).lines.sigma.tolist() == [0.1]
    assert [str(fault) for fault in read_text(text.format("0.2")).faults] == [
        "lines.csv:2: uncertainties 0.2 and 0.1 stand in the column and after the position, "
        "a line has one uncertainty, keep one of them"
    ]


MAP = {"position": "nu", "uncertainty": "unc", "v_upper": "v1", "v_lower": "v0", "label": "line"}


@pytest.mark.parametrize(
    ("text", "options", "messages"),
    [
        (
            "nu_obs,unc,v1,v0,line\n2147.08,0.1,1,0,R(0)\n",
            {"columns": MAP},
            [
                'lines.csv:1: column "nu" (position) is not in the header, the header reads '
                "nu_obs | unc | v1 | v0 | line, correct the column map",
            ],
        ),
        (
            "nuu,unc,v1,v0,line\n2147.08,0.1,1,0,R(0)\n",
            {"columns": MAP},
            [
                'lines.csv:1: column "nu" (position) is not in the header, the header reads '
                'nuu | unc | v1 | v0 | line, did you mean "nuu"? correct the column map'
            ],
        ),
        (
            "nu,nu,v1,v0,line,unc\n2147.08,0.1,1,0,R(0),1\n",
            {"columns": MAP},
            [
                'lines.csv:1: column "nu" (position) stands twice in the header, either could be meant, '
                "give the number of the column"
            ],
        ),
        (
            "2147.08,0.1,1,0,R(0)\n",
            {"columns": MAP, "header": False},
            [
                f'lines.csv: column "{name}" ({key}) cannot be found, the file has no header, '
                "give the number of the column"
                for key, name in MAP.items()
            ],
        ),
        (
            "2147.08,0.1,1,0,R(0)\n",
            {"columns": {"position": 1, "uncertainty": 2, "v_upper": 3, "v_lower": 4, "label": 7}},
            [
                "lines.csv: column 7 (label) does not exist, the rows have 5 columns, "
                "correct the column number or the delimiter"
            ],
        ),
        (
            "2147.08,0.1,1,0,R(0)\n",
            {},
            [
                "lines.csv: which column holds what is not said, the file has no header, "
                "give a column map such as { position = 1, ... }"
            ],
        ),
        (
            "wavenumber,error\n2147.08,0.1\n",
            {},
            [
                "lines.csv: which column holds what is not said, the header reads wavenumber | error, "
                'give a column map such as { position = "nu", ... }'
            ],
        ),
        (
            "position,uncertainty,j_lower\n2147.08,0.1,0\n",
            {"isotopologue": None},
            [
                "lines.csv: no column for v_upper, every line needs it, name v_upper in the column map",
                "lines.csv: no column for v_lower, every line needs it, name v_lower in the column map",
                "lines.csv: no columns for J, J is given as j_upper with j_lower, branch with j_lower, "
                "label, or m, name them in the column map",
                "lines.csv: no isotopologue, neither the source nor a column names it, set isotopologue for the source",
            ],
        ),
    ],
)
def test_a_file_whose_layout_is_not_understood(text, options, messages, read_text):
    reading = read_text(text, **options)
    assert [str(fault) for fault in reading.faults] == messages
    assert (reading.rows, reading.rejected) == (1, 1)


def test_delimiters_are_declared_by_name_or_sign(read_text):
    text = "position;uncertainty;v_upper;v_lower;label\n2147.08;0.1;1;0;R(0)\n"
    for delimiter in (None, "semicolon", ";"):
        assert read_text(text, delimiter=delimiter).used == 1
    assert "column" in str(read_text(text, delimiter="comma").faults[0])


def test_a_delimiter_is_guessed_from_most_rows(read_text):
    """One stray comma in a table set with blanks does not make it a table set with commas."""
    text = "2147.0811 0.0001,1 0 1 0\n" + "2150.8560 0.0001 1 0 2 1\n2154.5956 0.0001 1 0 3 2\n"
    names = ("position", "uncertainty", "v_upper", "v_lower", "j_upper", "j_lower")
    columns = {name: number for number, name in enumerate(names, start=1)}
    reading = read_text(text, columns=columns)
    assert reading.used == 2
    assert [str(fault) for fault in reading.faults] == [
        'lines.csv:1: 5 columns, expected 6, the text is "2147.0811 0.0001,1 0 1 0", '
        "mixed comma and blanks? correct the row or make it a comment"
    ]


def test_a_title_above_the_table_is_no_header(read_text):
    columns = {"position": 1, "uncertainty": 2, "v_upper": 3, "v_lower": 4, "label": 5}
    rows = "2147.081132,1e-6,1,0,R(0)\n2150.856006,1e-6,1,0,R(1)\n"
    reading = read_text("Lines of the fundamental\n" + rows, columns=columns)
    assert [str(fault) for fault in reading.faults] == [
        'lines.csv:1: 1 column, expected 5, the text is "Lines of the fundamental", '
        "mixed blanks and comma? correct the row or make it a comment"
    ]
    assert reading.used == 2
    assert read_text("nu,unc,upper,lower,line\n" + rows, columns=columns).faults == ()


def test_a_header_longer_or_shorter_than_the_rows(read_text):
    text = "position,uncertainty,v_upper,v_lower,label\n2147.081132,1e-6,1,0,R(0),x\n2150.9,1e-6,1,0,R(1),y\n"
    assert [fault.what for fault in read_text(text).faults] == ["6 columns, expected 5"] * 2


def test_blocks_join_without_a_seam(read_text, monkeypatch):
    text, options = GOLDEN["commas, header in our words"]
    whole = read_text(text, **options).lines
    monkeypatch.setattr("dunhamfit.lines.delimited.BLOCK", 2)
    parts = read_text(text, **options).lines
    assert parts.position.tolist() == whole.position.tolist()
    assert parts.row.tolist() == whole.row.tolist()
