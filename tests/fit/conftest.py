"""The real line list of the reference folder, read once."""

from __future__ import annotations

import warnings

import pytest

from dunhamfit.errors import DunhamfitWarning
from dunhamfit.lines.line_list import LineList
from dunhamfit.lines.reading import read_lines


@pytest.fixture(scope="session")
def carbon_monoxide(shared_reference) -> LineList:
    """5,381 lines of six isotopologues: HITRAN2016, I. E. Gordon et al., JQSRT 203, 3 (2017).

    The upper end of the decade of each uncertainty code is taken as sigma.
    """
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", DunhamfitWarning)  # about the decades, which is no finding here
        return read_lines(shared_reference / "co_hitran2016_6iso.par", format="hitran")


@pytest.fixture(scope="session")
def main_isotopologue(carbon_monoxide) -> LineList:
    """1,344 lines of 12C16O in 20 bands, v up to 7."""
    code = carbon_monoxide.isotopologues.index("12C16O")
    return carbon_monoxide.subset(carbon_monoxide.isotopologue == code)


@pytest.fixture(scope="session")
def up_to_v5(main_isotopologue) -> LineList:
    return main_isotopologue.subset(main_isotopologue.v_upper <= 5)
