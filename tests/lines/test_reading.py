"""One source from its files to a LineList."""

import csv
import math
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from dunhamfit.errors import DunhamfitError, DunhamfitWarning, InputFaults, UsageError
from dunhamfit.lines.reading import read_lines, read_source
from dunhamfit.lines.request import SourceRequest
from dunhamfit.units import UNITS, from_wavenumber, sigma_to_wavenumber

# The files of one test are overwritten by the next example, which is meant.
FUZZ = settings(max_examples=200, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])

NUMBERS = st.one_of(
    st.sampled_from(["", "-", "n/a", "nan", "inf", "0", "1", "2", "-1", "2.5", "412", "1e300", "1e-320", "−3", "1_0"]),
    st.sampled_from(["2147.0811", "2147.0811(12)", "2 147.081 1", "2147,0811", "2147.0811*", "0.0001", "\x1b[2J", '"']),
    st.integers(-3, 300).map(str),
    st.floats().map(repr),
    st.text(max_size=6),
)
WORDS = st.sampled_from(["R(0)", "P(0)", "P(3)", "Q(1)", "R(2.5)", "R", "P", "X", "", "12C16O", "C13O16", "R(400)"])
ROWS = st.lists(st.tuples(NUMBERS, NUMBERS, NUMBERS, NUMBERS, st.one_of(NUMBERS, WORDS), WORDS), max_size=12)
GOOD = ("2147.0811", "0.1", "1", "0", "R(3)", "12C16O")
MAPS = [
    {"position": 1, "uncertainty": 2, "v_upper": 3, "v_lower": 4, "label": 5},
    {"position": 1, "uncertainty": 2, "v_upper": 3, "v_lower": 4, "m": 5, "isotopologue": 6},
    {"position": 1, "v_upper": 3, "v_lower": 4, "branch": 6, "j_lower": 5},
    {"position": 1, "uncertainty": 5, "v_upper": 3, "v_lower": 3, "j_upper": 4, "j_lower": 2},
    {"position": "nu", "label": 9, "v_upper": 3, "v_lower": 4},
    None,
]
OPTIONS = {
    "columns": st.sampled_from(MAPS),
    "unit": st.sampled_from(UNITS),
    "uncertainty": st.sampled_from([None, 0.5]),
    "coverage_factor": st.sampled_from([None, 1.0, 2.0]),
    "use": st.sampled_from([None, "v_upper <= 1", 'branch == "R" and isotopologue != "12C16O"']),
    "decimal": st.sampled_from([".", ","]),
    "header": st.sampled_from([None, True, False]),
    "repeats": st.sampled_from(["refuse", "both"]),
    "allow_high_j": st.booleans(),
}


def check_reading(reading):
    """What must hold for any input whatever."""
    lines = reading.lines
    assert reading.rows == reading.used + reading.excluded + reading.rejected
    assert reading.rejected == 0 or reading.faults
    assert reading.rows > 0 or reading.faults
    for column in (lines.position, lines.sigma):
        assert np.isfinite(column).all()
        assert (column > 0).all()
    assert (np.abs(lines.j_upper - lines.j_lower) == 1).all()
    assert (np.minimum(lines.j_upper, lines.j_lower) >= 0).all()
    assert (lines.v_upper >= lines.v_lower).all()
    assert (lines.v_lower >= 0).all()
    for fault in reading.faults:
        assert str(fault).isprintable()
        assert fault.what and fault.why and fault.remedy
        assert len(str(fault)) < 2000
    assert all(notice.isprintable() for notice in reading.notices)


def read_bytes(tmp_path: Path, content: bytes, **options):
    path = tmp_path / "fuzz"
    path.write_bytes(content)
    try:
        reading = read_source(SourceRequest("fuzz", (path,), ("fuzz",), **options))
    except UsageError:
        return
    check_reading(reading)


@FUZZ
@given(
    rows=ROWS,
    good=st.integers(0, 3),
    delimiter=st.sampled_from([",", "\t", ";", " "]),
    options=st.fixed_dictionaries(OPTIONS),
)
def test_any_rows_give_counts_that_add_up(rows, good, delimiter, options, tmp_path):
    text = "\n".join(delimiter.join(row) for row in [*[GOOD] * good, *rows])
    read_bytes(tmp_path, text.encode("utf-8", "replace"), isotopologue="12C16O", **options)


@FUZZ
@given(content=st.binary(max_size=400), options=st.fixed_dictionaries(OPTIONS))
def test_any_bytes_give_faults_and_no_traceback(content, options, tmp_path):
    read_bytes(tmp_path, content, isotopologue="12C16O", **options)


RECORD = (
    b" 51 2147.081134 9.481E-20 1.726E+01.07760.087    0.00000.76-.002575              1              0"
    b"                    R  0      667665 5 8 2 2 1 7     3.0    1.0"
)
# Places in the record that are read, and some that are not.
PLACES = st.sampled_from([0, 1, 2, *range(3, 15), 30, *range(78, 82), *range(94, 97), 117, 118, 119, 120, 127])


@FUZZ
@given(
    records=st.lists(st.lists(st.tuples(PLACES, st.integers(0, 255)), max_size=4), max_size=8),
    tail=st.binary(max_size=200),
    table=st.sampled_from([None, "12C16O", "28Si32S", {1: "12C16O"}, {2: "13C16O"}]),
    uncertainty=st.sampled_from([None, 0.5]),
)
def test_any_records_give_counts_that_add_up(records, tail, table, uncertainty, tmp_path):
    content = b""
    for changes in records:
        record = bytearray(RECORD)
        for place, byte in changes:
            record[place] = byte
        content += bytes(record) + b"\n"
    read_bytes(tmp_path, content + tail, format="hitran", isotopologue=table, uncertainty=uncertainty)


class TestUnits:
    TEXT = "position,uncertainty,v_upper,v_lower,label\n{!r},{!r},{},0,R(0)\n"

    def test_megahertz_absolutely(self, read_text):
        """J = 1-0 of 12C16O: 115271.2018 MHz (Winnewisser et al. 1997), 3.845033 cm-1 in HITRAN2016."""
        lines = read_text(self.TEXT.format(115271.2018, 0.0005, 0), unit="MHz").lines
        assert lines.position[0] == pytest.approx(3.845033, abs=5e-7)
        assert lines.sigma[0] == pytest.approx(0.0005 / 29979.2458, rel=1e-15)

    def test_terahertz_and_micrometres_absolutely(self, read_text):
        """The iodine-stabilised He-Ne laser: 473.612353604 THz, 0.63299121258 um in vacuum.

        Both from the recommended list of the mise en pratique of the metre (CIPM 2001), from
        memory; the wavelength is given to 11 digits, hence the tolerance.
        """
        frequency = read_text(self.TEXT.format(473.612353604, 1e-8, 6), unit="THz").lines
        wavelength = read_text(self.TEXT.format(0.63299121258, 1e-11, 6), unit="um").lines
        assert frequency.position[0] == pytest.approx(15798.00, abs=0.01)
        assert wavelength.position[0] == pytest.approx(frequency.position[0], rel=1e-11)
        # The relative uncertainty is the same in either unit, to first order.
        assert wavelength.sigma[0] / wavelength.position[0] == pytest.approx(1e-11 / 0.63299121258, rel=1e-12)

    def test_gigahertz_is_a_thousand_megahertz(self, read_text):
        first = read_text(self.TEXT.format(115271.2018, 0.0005, 0), unit="MHz").lines
        second = read_text(self.TEXT.format(115.2712018, 0.0000005, 0), unit="GHz").lines
        assert second.position[0] == pytest.approx(first.position[0], rel=1e-15)
        assert second.sigma[0] == pytest.approx(first.sigma[0], rel=1e-15)

    def test_a_mixed_set_equals_the_same_set_in_wavenumbers(self, read_text, rng):
        """The same lines in every unit agree to 1e-12: the rounding of a few operations in doubles."""
        nu = np.sort(rng.uniform(2000, 2200, 20))
        sigma = rng.uniform(1e-6, 1e-3, 20)
        for unit in UNITS:
            given_as = from_wavenumber(nu, unit)
            # sigma in the other unit: the inverse of the first-order rule, by its own ratio.
            factor = sigma_to_wavenumber(np.ones(20), given_as, unit)
            rows = zip(given_as.tolist(), (sigma / factor).tolist(), range(20), strict=True)
            text = "position,uncertainty,v_upper,v_lower,label\n"
            text += "".join(f"{position!r},{error!r},1,0,R({j})\n" for position, error, j in rows)
            lines = read_text(text, unit=unit).lines
            assert lines.position == pytest.approx(nu, rel=1e-12)
            assert lines.sigma == pytest.approx(sigma, rel=1e-12)

    def test_calibration_terms_are_converted_too(self, read_text):
        source = read_text(self.TEXT.format(115271.2018, 0.5, 0), unit="MHz", offset=0.3, scale=5e-8).lines.sources[0]
        assert source.offset == pytest.approx(0.3 / 29979.2458, rel=1e-15)
        assert source.scale == 5e-8
        source = read_text(self.TEXT.format(115271.2018, 0.5, 0), unit="MHz", offset=math.inf).lines.sources[0]
        assert source.offset == math.inf


class TestCoverage:
    TEXT = "position,uncertainty,v_upper,v_lower,label\n2147.081132,0.000002,1,0,R(0)\n"

    def test_a_stated_factor_is_divided_out_and_said(self, read_text):
        reading = read_text(self.TEXT, coverage_factor=2)
        assert reading.lines.sigma[0] == 1e-6
        assert reading.lines.sources[0].coverage_factor == 2.0
        assert reading.notices == ('source "test": coverage factor 2; uncertainties were divided by it',)

    def test_a_missing_factor_is_said(self, read_text):
        reading = read_text(self.TEXT, coverage_factor=None)
        assert reading.lines.sigma[0] == 2e-6
        assert reading.notices == (
            'source "test": uncertainties are treated as 1 sigma; '
            "set coverage_factor = 1 to silence this, or to the k that the source states",
        )

    def test_one_is_silent(self, read_text):
        assert read_text(self.TEXT, coverage_factor=1).notices == ()

    def test_the_uncertainty_of_the_source_has_the_factor_too(self, read_text):
        text = "position,v_upper,v_lower,label\n2147.081132,1,0,R(0)\n"
        assert read_text(text, coverage_factor=2, uncertainty=0.5).lines.sigma[0] == 0.25


class TestUse:
    TEXT = "position,uncertainty,v_upper,v_lower,label\n2147.1,0.1,1,0,R(0)\n4260.1,0.1,2,0,R(0)\n6350.4,0.1,3,0,R(0)\n"

    def test_rows_not_chosen_stay_in_the_list_with_the_reason(self, read_text):
        reading = read_text(self.TEXT, use="v_upper <= 2")
        assert (reading.rows, reading.used, reading.excluded, reading.rejected) == (3, 2, 1, 0)
        lines = reading.lines
        assert len(lines) == 3
        assert lines.reasons[lines.exclusion[2]] == "use: v_upper <= 2"

    def test_nothing_chosen_is_a_fault(self, read_text):
        reading = read_text(self.TEXT, use="v_upper > 7")
        assert [str(fault) for fault in reading.faults] == [
            'source "test": none of the 3 rows is used, use: v_upper > 7, correct the choice or leave the source out'
        ]

    def test_a_fault_in_a_row_not_chosen_is_told_all_the_same(self, read_text):
        reading = read_text(self.TEXT + "8400,0,4,0,R(0)\n", use="v_upper <= 2")
        assert [fault.line for fault in reading.faults] == [5]
        assert (reading.used, reading.excluded, reading.rejected) == (2, 1, 1)


class TestFiles:
    ROW = "position,uncertainty,v_upper,v_lower,label\n{},0.1,1,0,R({})\n"

    def request(self, tmp_path, *names, **options):
        return SourceRequest("s", tuple(tmp_path / name for name in names), names, isotopologue="12C16O", **options)

    def test_several_files_are_one_source(self, tmp_path):
        (tmp_path / "a.csv").write_text(self.ROW.format(2147.1, 0))
        (tmp_path / "b.csv").write_text(self.ROW.format(2150.9, 1))
        lines = read_source(self.request(tmp_path, "a.csv", "b.csv")).lines
        assert [lines.place(i) for i in (0, 1)] == ["a.csv:2", "b.csv:2"]
        assert lines.sources[0].files == ("a.csv", "b.csv")

    def test_the_digest_is_sha_256_of_the_bytes(self, tmp_path):
        """The digest of "abc" is printed in NIST FIPS 180-2, appendix B.1."""
        (tmp_path / "a").write_bytes(b"abc")
        digest = "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"
        assert read_source(self.request(tmp_path, "a")).lines.sources[0].digests == (digest,)

    def test_repeats_are_found_across_files(self, tmp_path):
        (tmp_path / "a.csv").write_text(self.ROW.format(2147.1, 0))
        (tmp_path / "b.csv").write_text("\n" + self.ROW.format(2147.1, 0))
        faults = read_source(self.request(tmp_path, "a.csv", "b.csv")).faults
        assert [str(fault) for fault in faults] == [
            "b.csv:3: 12C16O 1-0 R(0) repeats a.csv:2 (same source, line and value), "
            "keeping both would shrink error bars by up to 1.41, remove one"
        ]

    def test_faults_come_in_the_order_of_files_and_lines(self, tmp_path):
        (tmp_path / "a.csv").write_text(self.ROW.format(2147.1, 0) + "2147.1,0.1,1,0,R(0)\nx,0.1,1,0,R(1)\n")
        (tmp_path / "b.csv").write_text("nothing here\n")
        (tmp_path / "c.csv").write_text(self.ROW.format("x", 0))
        faults = read_source(self.request(tmp_path, "a.csv", "b.csv", "c.csv", "d.csv")).faults
        assert [(fault.file, fault.line) for fault in faults] == [
            ("a.csv", 3),
            ("a.csv", 4),
            ("b.csv", 0),
            ("c.csv", 2),
            ("d.csv", 0),
        ]

    @pytest.mark.parametrize(
        ("content", "message"),
        [
            (
                b"",
                "a: no rows of data, the file is empty or holds comments only, name another file or remove it",
            ),
            (
                b"# x\n\n",
                "a: no rows of data, the file is empty or holds comments only, name another file or remove it",
            ),
            (
                b"position,label\n",
                "a: no column for v_upper, every line needs it, name v_upper in the column map",
            ),
            (
                b"position,uncertainty,v_upper,v_lower,label\n",
                "a: no rows of data, the file is empty or holds comments only, name another file or remove it",
            ),
            (
                b"ok\n2147.1 \xb1 0.1\n",
                "a:2: byte 0xb1 is not UTF-8, the file is binary or in another encoding, save it as UTF-8 text",
            ),
            (
                b"\x89HDF\r\n\x1a\n\0\0\0",
                "a: the file is not text: it holds zero bytes, plain UTF-8 text was expected, save it as UTF-8 text",
            ),
            (
                "position".encode("utf-16"),
                "a: the file is UTF-16 text, plain UTF-8 text was expected, save it as UTF-8 text",
            ),
        ],
    )
    def test_files_that_cannot_be_read(self, content, message, tmp_path):
        (tmp_path / "a").write_bytes(content)
        reading = read_source(self.request(tmp_path, "a"))
        assert str(reading.faults[0]) == message
        assert len(reading.lines) == 0

    def test_no_such_file_and_a_folder(self, tmp_path):
        (tmp_path / "folder").mkdir()
        reading = read_source(self.request(tmp_path, "gone.csv", "folder", "bad\0name"))
        assert [str(fault) for fault in reading.faults] == [
            "gone.csv: the file does not exist, nothing could be read, check its name and folder",
            "folder: this is a folder, a file was expected, name the file",
            "bad\\x00name: the file cannot be read, embedded null byte, check its name and permissions",
        ]
        assert (reading.rows, reading.rejected, len(reading.lines)) == (0, 0, 0)

    def test_a_file_listed_twice_is_read_once(self, tmp_path):
        (tmp_path / "a.csv").write_text(self.ROW.format(2147.1, 0))
        (tmp_path / "b.csv").symlink_to(tmp_path / "a.csv")
        reading = read_source(self.request(tmp_path, "a.csv", "b.csv"))
        assert [str(fault) for fault in reading.faults] == [
            "b.csv: the file is listed twice, the source names it as a.csv already, remove one"
        ]
        assert reading.rows == 1


TWELVE = """position,uncertainty,v_upper,v_lower,label,isotopologue
2147.0811,0.0001,1,0,R(0),12C16O
2143.2711,0.0001,1,0,P(0),12C16O
2150.8560,0.00,1,0,R(1),12C16O
2154.5956,,1,0,R(2),12C16O
2158.2997,0.0001,1,0,R(-3),12C16O
2161.9686,0.0001,1,0,R(4.5),12C16O
2165.6009,0.0001,1,0,Q(5),12C16O
2169.1979,0.0001,0,1,P(7),12C16O
2147.0811,0.0001,1,0,R(0),12C16O
2147.0821,0.0001,1,0,R(0),12C16O
2099.7107,0.0001,1,0,R(0),C13O16
2172.7587 0.0001,1,0,R(7),12C16O
n/a,0.0001,1,0,R(8),12C16O
"""


def test_twelve_planted_faults_give_twelve_messages(tmp_path):
    path = tmp_path / "twelve.csv"
    path.write_text(TWELVE)
    with pytest.raises(InputFaults) as caught:
        read_lines(path)
    assert [fault.line for fault in caught.value.faults] == list(range(3, 15))
    text = str(caught.value)
    assert text.splitlines()[0] == "1 row is fine; 12 faults, nothing was fitted:"
    assert len(text.splitlines()) == 13
    assert isinstance(caught.value, DunhamfitError)


class TestPythonInterface:
    def test_a_published_table(self, shared_reference, tmp_path):
        """12C16O 1-0 of the CRC Handbook, whose uncertainties are 2 sigma; the band is put in as columns."""
        with (shared_reference / "co_1-0_crc.csv").open(newline="") as stream:
            table = list(csv.reader(stream))
        path = tmp_path / "crc.csv"
        rows = [[*row, *(("v1", "v0") if i == 0 else ("1", "0"))] for i, row in enumerate(table)]
        path.write_text("\n".join(",".join(row) for row in rows))
        columns = {
            "position": "wavenumber_cm-1",
            "uncertainty": "unc_2sigma_cm-1",
            "branch": "branch",
            "j_lower": "J_lower",
            "v_upper": "v1",
            "v_lower": "v0",
        }
        with pytest.warns(DunhamfitWarning, match="coverage factor 2"):
            lines = read_lines(path, isotopologue="12C16O", columns=columns, coverage_factor=2.0)
        assert len(lines) == 8
        assert lines.position.tolist() == [float(row[2]) for row in table[1:]]
        assert lines.sigma.tolist() == [float(row[3]) / 2 for row in table[1:]]

    def test_rotation_in_megahertz(self, shared_reference):
        """One column may serve twice: v' = v'' in pure rotation."""
        lines = read_lines(
            shared_reference / "co_rotational_MHz.csv",
            unit="MHz",
            uncertainty=0.05,
            columns={
                "isotopologue": "isotopologue",
                "v_upper": "v",
                "v_lower": "v",
                "j_upper": "Ju",
                "j_lower": "Jl",
                "position": "freq_MHz",
            },
        )
        assert set(lines.isotopologues) == {"12C16O", "13C16O", "12C18O"}
        assert lines.label(0) == "12C16O 0-0 R(0)"
        assert lines.position[0] * 29979.2458 == pytest.approx(115271.2018, rel=1e-15)

    def test_the_name_of_the_source(self, tmp_path):
        path = tmp_path / "furnace.csv"
        path.write_text(TestFiles.ROW.format(2147.1, 0))
        assert read_lines(path, isotopologue="12C16O").sources[0].name == "furnace"
        assert read_lines(str(path), isotopologue="12C16O", name="winter").sources[0].name == "winter"

    def test_missing_files_raise(self, tmp_path):
        with pytest.raises(InputFaults, match="the file does not exist"):
            read_lines(tmp_path / "gone.csv", isotopologue="12C16O")


def test_reading_loads_nothing_heavy():
    code = (
        "import sys, dunhamfit.lines.reading;"
        "print([name for name in ('scipy', 'pandas', 'h5py', 'matplotlib') if name in sys.modules])"
    )
    result = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert result.stdout.strip() == "[]"
