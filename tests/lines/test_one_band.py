"""Tables of one band without columns for v: the source names the band."""

from __future__ import annotations

import pytest

from dunhamfit.errors import UsageError
from dunhamfit.lines.reading import read_lines

COLUMNS = {"branch": "branch", "j_lower": "J_lower", "position": "wavenumber_cm-1", "uncertainty": "unc_2sigma_cm-1"}


def test_published_table_of_one_band(shared_reference):
    """A. Maki, CRC Handbook of Chemistry and Physics: eight lines of the fundamental of 12C16O, 2 sigma."""
    lines = read_lines(
        shared_reference / "co_1-0_crc.csv",
        isotopologue="12C16O",
        band="1-0",
        columns=COLUMNS,
        coverage_factor=1.0,
    )
    assert lines.label(0) == "12C16O 1-0 R(0)"
    assert lines.position[0] == 2147.081132
    assert set(lines.v_upper) == {1}
    assert set(lines.v_lower) == {0}


@pytest.mark.parametrize(
    ("band", "columns", "said"),
    [
        ("one", None, "source 'x': 'band' must be v' and v'' such as \"1-0\" (got 'one')"),
        ("1-0", {"v_upper": 1, **COLUMNS}, "source 'x': 'band' and 'columns' both give v; keep one"),
    ],
)
def test_band_that_cannot_be_meant(band, columns, said):
    with pytest.raises(UsageError) as caught:
        read_lines("x.csv", isotopologue="28Si32S", band=band, columns=columns)
    assert str(caught.value) == said
