"""The guard against a wrong unit.

Frequencies of 12C16O in MHz: G. Winnewisser et al., J. Mol. Spectrosc. 184, 468 (1997).
"""

import pytest

from dunhamfit.lines.reading import read_source
from dunhamfit.lines.request import SourceRequest
from dunhamfit.units import UNITS, from_wavenumber

ROTATION = [115271.2018, 230538.0000, 345795.9899, 461040.7682]  # MHz, J = 1-0 to 4-3
FUNDAMENTAL = [
    2147.081132,
    2150.856006,
    2154.595581,
    2158.299710,
]  # cm-1, R(0) to R(3), CRC Handbook (A. Maki)


def rows(positions, v_upper):
    lines = (f"{position!r},{position * 1e-7!r},{v_upper},0,R({j})\n" for j, position in enumerate(positions))
    return "position,uncertainty,v_upper,v_lower,label\n" + "".join(lines)


def test_megahertz_declared_as_wavenumbers(read_text):
    reading = read_text(rows(ROTATION, 0))
    assert [str(fault) for fault in reading.faults] == [
        "lines.csv: median 3.46e+05 in a source declared cm-1, no 0-0 R(2) line of a diatomic molecule "
        "is near 3.46e+05 cm-1, set unit: MHz would fit"
    ]


def test_wavenumbers_declared_as_megahertz(read_text):
    reading = read_text(rows(FUNDAMENTAL, 1), unit="MHz")
    assert [fault.remedy for fault in reading.faults] == ["set unit: cm-1 or GHz would fit"]


def test_nothing_fits(read_text):
    reading = read_text(rows([1e15, 1.1e15], 1))
    assert [fault.remedy for fault in reading.faults] == ["check the unit and the position column"]


@pytest.mark.parametrize("unit", UNITS)
@pytest.mark.parametrize("v_upper", [0, 1])
def test_the_right_unit_passes(unit, v_upper, read_text):
    cm = [megahertz / 29979.2458 for megahertz in ROTATION] if v_upper == 0 else FUNDAMENTAL
    assert read_text(rows(from_wavenumber(cm, unit).tolist(), v_upper), unit=unit).faults == ()


@pytest.mark.parametrize(
    ("omega", "b"),
    [
        (4401.21, 60.853),  # H2
        (42.02, 0.0127),  # Cs2, from memory
    ],
)
def test_the_lightest_and_a_heavy_molecule_pass(omega, b, read_text):
    """Huber and Herzberg, Constants of Diatomic Molecules (1979)."""
    assert read_text(rows([omega + 2 * b * (j + 1) for j in range(5)], 1)).faults == ()
    assert read_text(rows([2 * b * (j + 1) for j in range(5)], 0)).faults == ()


def test_every_file_is_judged_by_itself(tmp_path):
    (tmp_path / "a.csv").write_text(rows(FUNDAMENTAL, 1))
    (tmp_path / "b.csv").write_text(rows([29979.2458 * nu for nu in FUNDAMENTAL], 2))
    request = SourceRequest("two", (tmp_path / "a.csv", tmp_path / "b.csv"), ("a", "b"), isotopologue="12C16O")
    assert [fault.file for fault in read_source(request).faults] == ["b"]
