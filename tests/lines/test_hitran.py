"""HITRAN records: read by column, decade codes, isotopologue codes, and what is refused.

The record layout and the meaning of the codes are those of Rothman et al., J. Quant.
Spectrosc. Radiat. Transf. 96, 139 (2005). The real list is HITRAN2016, Gordon et al., J.
Quant. Spectrosc. Radiat. Transf. 203, 3 (2017).
"""

import csv
import time

import numpy as np
import pytest

from dunhamfit.errors import DunhamfitWarning, UsageError
from dunhamfit.lines.numbering import PUBLISHED, name_codes
from dunhamfit.lines.reading import read_lines, read_source
from dunhamfit.lines.request import SourceRequest

# 12C16O 1-0 R(0) as it stands in the 2016 list.
RECORD = (
    " 51 2147.081134 9.481E-20 1.726E+01.07760.087    0.00000.76-.002575              1              0"
    "                    R  0      667665 5 8 2 2 1 7     3.0    1.0"
)


def record(**fields: str) -> str:
    """The record above with fields replaced, by name."""
    columns = {
        "molecule": (0, 2),
        "code": (2, 3),
        "position": (3, 15),
        "v_upper": (67, 82),
        "v_lower": (82, 97),
        "branch": (117, 118),
        "j_lower": (118, 121),
        "error": (127, 128),
    }
    text = RECORD
    for name, value in fields.items():
        start, end = columns[name]
        text = text[:start] + value.rjust(end - start) + text[end:]
    assert len(text) == 160
    return text


@pytest.fixture
def read_records(read_text):
    def read(*records: str, **options):
        options = {"format": "hitran", "isotopologue": None} | options
        return read_text("\r\n".join(records) + "\r\n", **options)

    return read


def messages(reading) -> list[str]:
    return [str(fault) for fault in reading.faults]


def test_one_record(read_records):
    reading = read_records(RECORD)
    lines = reading.lines
    assert messages(reading) == []
    assert lines.label(0) == "12C16O 1-0 R(0)"
    assert (lines.position[0], lines.sigma[0]) == (2147.081134, 1e-5)
    assert (lines.v_upper[0], lines.j_upper[0], lines.v_lower[0], lines.j_lower[0]) == (1, 1, 0, 0)


@pytest.mark.parametrize(
    ("code", "sigma"),
    [
        ("1", 1.0),
        ("2", 0.1),
        ("3", 1e-2),
        ("4", 1e-3),
        ("5", 1e-4),
        ("6", 1e-5),
        ("7", 1e-6),
        ("8", 1e-7),
        ("9", 1e-8),
    ],
)
def test_a_decade_code_gives_the_upper_end_of_its_decade(code, sigma, read_records):
    reading = read_records(record(error=code))
    assert reading.lines.sigma.tolist() == [sigma]
    assert reading.notices == (
        "lines.csv: HITRAN uncertainty codes name decades; the upper end is taken as sigma: "
        f"code {code}: {sigma:g} cm-1 (1 line)",
    )


def test_code_0_states_nothing(read_records):
    reading = read_records(record(error="0"), record(j_lower="1", position="2150.856"))
    assert messages(reading) == [
        "lines.csv:1: uncertainty code 0 states no value, it means 1 cm-1 or more, or unreported, "
        "set uncertainty for the source"
    ]
    reading = read_records(record(error="0"), record(j_lower="1", position="2150.856"), uncertainty=2.0)
    assert reading.lines.sigma.tolist() == [2.0, 1e-5]
    assert reading.notices == (
        "lines.csv: HITRAN uncertainty codes name decades; the upper end is taken as sigma: "
        "code 0: 2 cm-1 as the source states (1 line), code 6: 1e-05 cm-1 (1 line)",
    )


def test_the_coverage_factor_divides_here_too(read_records):
    assert read_records(RECORD, coverage_factor=2.0).lines.sigma.tolist() == [5e-6]


@pytest.mark.parametrize(
    ("fields", "message"),
    [
        ({"molecule": "x5"}, 'molecule "x5" cannot be read, columns 1-2 hold the molecule number'),
        ({"code": "?"}, 'isotopologue "?" cannot be read, column 3 holds the isotopologue code'),
        (
            {"position": "2147.08l"},
            'position "2147.08l" cannot be read, columns 4-15 hold a position in cm-1',
        ),
        ({"position": "2.1.4"}, 'position "2.1.4" cannot be read, columns 4-15 hold a position in cm-1'),
        ({"position": ""}, 'position "" cannot be read, columns 4-15 hold a position in cm-1'),
        ({"position": "nan"}, 'position "nan" cannot be read, columns 4-15 hold a position in cm-1'),
        (
            {"v_upper": "X3/2          1"},
            'v\' "X3/2          1" cannot be read, columns 68-82 hold v alone for a closed-shell diatomic molecule',
        ),
        (
            {"v_lower": "0 "},
            "v'' \"0\" cannot be read, columns 83-97 hold v alone for a closed-shell diatomic molecule",
        ),
        ({"branch": "X"}, 'branch "X" cannot be read, column 118 holds the branch letter'),
        ({"j_lower": "1.5"}, "J'' \"1.5\" cannot be read, columns 119-121 hold J''"),
        ({"j_lower": "1 2"}, "J'' \"1 2\" cannot be read, columns 119-121 hold J''"),
        ({"error": " "}, 'uncertainty code "" cannot be read, column 128 holds a digit'),
    ],
)
def test_a_field_that_cannot_be_read(fields, message, read_records):
    reading = read_records(record(j_lower="4", position="2161.97"), record(**fields))
    assert messages(reading) == [f"lines.csv:2: {message}, restore the record or remove it"]
    assert (reading.used, reading.rejected) == (1, 1)


def test_a_record_of_another_length(read_records):
    reading = read_records(RECORD, RECORD[:-2], "x")
    assert messages(reading) == [
        "lines.csv:2: 158 characters, expected 160, HITRAN records are read by column and the text is "
        '"51 2147.081134 9.481E-20 1.726E+01.07760.087    0.00000.7...", restore the record or remove it',
        'lines.csv:3: 1 character, expected 160, HITRAN records are read by column and the text is "x", '
        "restore the record or remove it",
    ]
    assert (reading.rows, reading.used) == (3, 1)


def test_empty_lines_and_a_byte_order_mark_are_no_records(read_text):
    reading = read_text("\ufeff" + RECORD + "\n\n  \n", format="hitran", isotopologue=None)
    assert (reading.rows, reading.used, reading.faults) == (1, 1, ())


def test_physical_faults_are_the_same_as_in_text(read_records):
    reading = read_records(record(branch="P"), record(branch="Q", j_lower="7"), record(position="-2147.08"))
    assert messages(reading) == [
        "lines.csv:1: P(0) does not exist (it needs J'=-1), J in a branch label is the LOWER-state J so P "
        "starts at P(1), if the file counts by m, P lines have m=-J and R lines m=J+1",
        "lines.csv:2: Q(7) has dJ=0, forbidden for an electric-dipole 1Sigma line, "
        "correct it or leave the line out; quadrupole lines are not taken",
        "lines.csv:3: position -2147.08 is not positive, a line is the upper level minus the lower one, "
        "correct the value, or exchange the upper and the lower level",
    ]


class TestIsotopologues:
    MIXED = (RECORD, record(code="2", position="2099.7"), record(code="3", position="2095.7"))

    def test_all_by_the_published_numbering(self, read_records):
        lines = read_records(*self.MIXED).lines
        assert [lines.label(i).split()[0] for i in range(3)] == ["12C16O", "13C16O", "12C18O"]

    def test_a_table_chooses(self, read_records):
        reading = read_records(*self.MIXED, isotopologue={1: "12C16O", 2: "13C16O"})
        assert (reading.used, reading.excluded, reading.rejected) == (2, 1, 0)
        lines = reading.lines
        assert lines.reasons[lines.exclusion[2]] == "isotopologue code 3 is not in the table"
        assert reading.notices[0] == "lines.csv: 1 line left out: isotopologue code 3 is not in the table"
        assert "(2 lines)" in reading.notices[1]

    def test_a_name_chooses(self, read_records):
        reading = read_records(*self.MIXED, isotopologue="13C16O")
        assert (reading.used, reading.excluded) == (1, 2)
        assert reading.notices[:2] == (
            "lines.csv: 1 line left out: isotopologue code 1 is not 13C16O",
            "lines.csv: 1 line left out: isotopologue code 3 is not 13C16O",
        )

    def test_a_table_from_a_job_file_has_text_for_keys(self, read_records):
        assert read_records(*self.MIXED, isotopologue={"1": "12C16O"}).used == 1

    def test_a_name_without_a_code(self, read_records):
        reading = read_records(*self.MIXED, isotopologue="14C16O")
        assert messages(reading) == [
            "lines.csv: 14C16O has no code in the published numbering of molecule 5, that numbers 12C16O, "
            "13C16O, 12C18O, 12C17O, 13C18O, 13C17O, "
            'give a table such as isotopologue = {1 = "28Si32S"}'
        ]

    def test_a_molecule_without_a_known_numbering(self, read_records):
        both = (record(molecule="99"), record(molecule="99", code="2", position="2099.7"))
        for wanted in (None, "28Si32S"):
            assert messages(read_records(*both, isotopologue=wanted)) == [
                "lines.csv: isotopologue codes 1, 2 of molecule 99 cannot be named, its published "
                'numbering is not known here, give a table such as isotopologue = {1 = "28Si32S"}'
            ]
        assert read_records(both[0], isotopologue="28Si32S").lines.isotopologues == ("28Si32S",)
        assert read_records(*both, isotopologue={1: "28Si32S", 2: "29Si32S"}).used == 2

    def test_a_code_beyond_the_published_numbering(self, read_records):
        reading = read_records(RECORD, record(code="9"), record(code="0", j_lower="3"), record(code="A", j_lower="4"))
        assert messages(reading) == [
            f"lines.csv:{line}: isotopologue code {code} is not known, the published numbering of molecule 5 "
            'does not hold it, give a table such as isotopologue = {1 = "28Si32S"}'
            for line, code in ((2, 9), (3, 10), (4, 11))
        ]

    def test_one_source_holds_one_molecule(self, read_records):
        reading = read_records(RECORD, record(molecule="46"))
        assert messages(reading) == [
            "lines.csv: the file holds molecules 5, 46, a source holds one molecule, split the file"
        ]
        assert reading.rejected == 2

    def test_nothing_chosen_is_a_fault(self, read_records):
        reading = read_records(RECORD, isotopologue={7: "14C16O"})
        assert messages(reading) == [
            'source "test": none of the 1 rows is used, isotopologue code 1 is not in the table, '
            "correct the choice or leave the source out"
        ]

    def test_names_of_codes(self):
        assert name_codes(46, [1, 4], None).names == {1: "12C32S", 4: "12C33S"}
        assert name_codes(46, [1, 4], "12C33S").left_out == {1: "12C32S"}
        assert name_codes(99, [1, 4], {4: "28Si32S"}).left_out == {1: "code 1"}
        assert all(len(set(names)) == len(names) for names in PUBLISHED.values())


def test_what_the_format_fixes_is_not_declared(read_records):
    with pytest.raises(UsageError, match=r"'unit' must be \"cm-1\" for HITRAN records"):
        read_records(RECORD, unit="MHz")
    with pytest.raises(UsageError, match="'columns' must be left out for HITRAN records"):
        read_records(RECORD, columns={"position": 1})


def test_the_warning_of_the_python_interface(tmp_path):
    path = tmp_path / "co.par"
    path.write_text(RECORD + "\n")
    with pytest.warns(DunhamfitWarning, match=r"code 6: 1e-05 cm-1 \(1 line\)"):
        lines = read_lines(path, format="hitran", isotopologue={1: "12C16O"})
    assert lines.label(0) == "12C16O 1-0 R(0)"
    assert lines.sources[0].name == "co"


def read_real(folder, **options):
    path = folder / "co_hitran2016_6iso.par"
    return read_source(SourceRequest(name="co", files=(path,), shown=("co.par",), format="hitran", **options))


@pytest.fixture(scope="module")
def reading(shared_reference):
    return read_real(shared_reference)


class TestRealList:
    """The published list; counts from an independent count of its columns (5381 lines, six isotopologues)."""

    def test_every_record_parses(self, reading):
        assert (reading.rows, reading.used, reading.excluded, reading.rejected) == (5381, 5381, 0, 0)
        assert reading.faults == ()
        codes = np.bincount(reading.lines.isotopologue)
        assert dict(zip(reading.lines.isotopologues, codes.tolist(), strict=True)) == {
            "12C16O": 1344,
            "13C16O": 1042,
            "12C18O": 920,
            "12C17O": 800,
            "13C18O": 674,
            "13C17O": 601,
        }

    def test_one_isotopologue(self, shared_reference):
        """1,344 lines in 20 bands; 25, 934, 128 and 257 lines of codes 3 to 6, by the notes on the list."""
        reading = read_real(shared_reference, isotopologue={1: "12C16O"})
        assert (reading.rows, reading.used, reading.excluded) == (5381, 1344, 4037)
        lines = reading.lines.subset(reading.lines.used)
        assert len(set(zip(lines.v_upper.tolist(), lines.v_lower.tolist(), strict=True))) == 20
        values, counts = np.unique(lines.sigma, return_counts=True)
        assert dict(zip(values.tolist(), counts.tolist(), strict=True)) == {
            1e-5: 257,
            1e-4: 128,
            1e-3: 934,
            1e-2: 25,
        }
        assert reading.notices[-1] == (
            "co.par: HITRAN uncertainty codes name decades; the upper end is taken as sigma: code 3: 0.01 "
            "cm-1 (25 lines), code 4: 0.001 cm-1 (934 lines), code 5: 0.0001 cm-1 (128 lines), "
            "code 6: 1e-05 cm-1 (257 lines)"
        )

    def test_every_field_equals_a_plain_slice_of_the_text(self, reading, shared_reference):
        texts = (shared_reference / "co_hitran2016_6iso.par").read_text().splitlines()
        lines = reading.lines
        assert lines.position.tolist() == [float(text[3:15]) for text in texts]
        assert lines.v_upper.tolist() == [int(text[67:82]) for text in texts]
        assert lines.v_lower.tolist() == [int(text[82:97]) for text in texts]
        assert lines.j_lower.tolist() == [int(text[118:121]) for text in texts]
        steps = (lines.j_upper - lines.j_lower).tolist()
        assert steps == [{"P": -1, "R": 1}[text[117]] for text in texts]
        assert lines.row.tolist() == list(range(1, len(texts) + 1))

    def test_against_another_table_of_the_same_band(self, reading, shared_reference):
        """The CRC table (A. Maki) agrees with this list to 2e-6 cm-1, by the notes on both."""
        lines = reading.lines
        with (shared_reference / "co_1-0_crc.csv").open(newline="") as stream:
            table = list(csv.DictReader(stream))
        for row in table:
            step = {"P": -1, "R": 1}[row["branch"]]
            found = (lines.isotopologue == 0) & (lines.v_upper == 1) & (lines.v_lower == 0)
            found &= (lines.j_lower == int(row["J_lower"])) & (lines.j_upper == int(row["J_lower"]) + step)
            assert lines.position[found] == pytest.approx([float(row["wavenumber_cm-1"])], abs=2.5e-6)

    def test_it_is_read_in_60_ms(self, shared_reference):
        """Best of five, so that a busy machine does not decide; the job reads it before every fit."""
        times = []
        for _ in range(5):
            start = time.perf_counter()
            read_real(shared_reference)
            times.append(time.perf_counter() - start)
        assert min(times) < 0.06
