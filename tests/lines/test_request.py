"""A source that asks for what does not exist is refused before any file is opened."""

import math

import pytest

from dunhamfit.errors import UsageError
from dunhamfit.lines.request import SourceRequest


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"files": ()}, "source 's': no file is given"),
        ({"shown": ("a", "b")}, "source 's': 'shown' must name 1 files (got 2)"),
        ({"format": "excel"}, "source 's': 'format' must be \"delimited\" or \"hitran\" (got 'excel')"),
        (
            {"unit": "nm"},
            "unit 'nm' is not known; use one of cm-1, MHz, GHz, THz, um (um: vacuum wavelength)",
        ),
        ({"decimal": ";"}, "source 's': 'decimal' must be \".\" or \",\" (got ';')"),
        ({"repeats": "average"}, "source 's': 'repeats' must be \"refuse\" or \"both\" (got 'average')"),
        (
            {"delimiter": "|"},
            "source 's': 'delimiter' must be one of comma, tab, semicolon, blanks (got '|')",
        ),
        (
            {"delimiter": "comma", "decimal": ","},
            "source 's': 'delimiter' must be another character than the decimal sign (got 'comma')",
        ),
        ({"uncertainty": 0}, "source 's': 'uncertainty' must be a positive number (got 0)"),
        ({"uncertainty": math.nan}, "source 's': 'uncertainty' must be a positive number (got nan)"),
        ({"uncertainty": math.inf}, "source 's': 'uncertainty' must be a finite number (got inf)"),
        ({"coverage_factor": -2}, "source 's': 'coverage_factor' must be a positive number (got -2)"),
        ({"coverage_factor": True}, "source 's': 'coverage_factor' must be a positive number (got True)"),
        ({"scale": "free"}, "source 's': 'scale' must be a positive number (got 'free')"),
        (
            {"offset": 1e-4, "unit": "um"},
            "source 's': an offset in um differs from line to line in cm-1; "
            "state the shared error of wavelengths as 'scale'",
        ),
        (
            {"columns": {"nu": "position"}},
            "source 's': 'nu' is no column; use some of position, uncertainty, v_upper, v_lower, j_upper, "
            "j_lower, branch, label, m, isotopologue",
        ),
        (
            {"columns": {"position": 0}},
            "source 's': 'columns.position' must be a header name or a column number from 1 (got 0)",
        ),
        (
            {"columns": {"position": True}},
            "source 's': 'columns.position' must be a header name or a column number from 1 (got True)",
        ),
        (
            {"columns": {"branch": 1, "j_lower": 2, "label": 3}},
            "source 's': 'columns' gives J twice, as branch with j_lower and as label; keep one",
        ),
        (
            {"isotopologue": {1: "12C16O"}},
            "source 's': a table of isotopologue codes serves HITRAN records only; "
            "name the isotopologue or map a column to it",
        ),
        (
            {"isotopologue": {"one": "12C16O"}, "format": "hitran"},
            "source 's': 'isotopologue' must be a table from code numbers to names (got {'one': '12C16O'})",
        ),
        (
            {"isotopologue": ""},
            "source 's': 'isotopologue' must be a name, or for HITRAN records a table such as "
            "{1 = \"28Si32S\"} (got '')",
        ),
    ],
)
def test_refusals(options, message):
    with pytest.raises(UsageError) as caught:
        SourceRequest(**({"name": "s", "files": ("a.csv",)} | options))
    assert str(caught.value) == message


def test_a_bad_choice_is_refused_at_once():
    with pytest.raises(UsageError, match="'weight' is not known"):
        SourceRequest("s", ("a.csv",), use="weight > 1")


def test_free_calibration_terms_are_infinite():
    request = SourceRequest("s", ("a.csv",), offset=math.inf, scale=math.inf, unit="um")
    assert request.offset == request.scale == math.inf


def test_defaults():
    request = SourceRequest("s", ("a.csv",))
    assert request.shown == ("a.csv",)
    assert request.coverage_factor is None
