"""Spelling of isotopologues."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from dunhamfit.errors import UsageError
from dunhamfit.lines.spelling import check_spelling


@pytest.mark.parametrize("name", ["28Si32S", "12C1H+", "13C16O", "14N14N", "D35Cl", "H35Cl+", "16O1H-", "12C16O2+"])
def test_good_names(name):
    assert check_spelling(name) == name


@pytest.mark.parametrize(
    ("name", "meant"),
    [
        ("C13O16", "13C16O"),
        ("Si28-S32", "28Si32S"),
        ("13c16o", "13C16O"),
        ("28SI32S", "28Si32S"),
        ("12C-16O", "12C16O"),
        ("[28]Si[32]S", "28Si32S"),
        ("C12H1+", "12C1H+"),
    ],
)
def test_what_was_meant(name, meant):
    with pytest.raises(UsageError, match=rf"is not recognised; did you mean {meant.replace('+', '[+]')}\? "):
        check_spelling(name)


def test_the_message_says_how_to_write():
    with pytest.raises(UsageError) as caught:
        check_spelling("carbon\x1b")
    assert str(caught.value) == (
        '"carbon\\x1b" is not recognised; write mass numbers before the symbols and the charge last, '
        "as in 28Si32S or 12C1H+"
    )


@given(st.text(max_size=20))
def test_any_text_is_a_name_or_a_refusal(text):
    try:
        assert check_spelling(text) == text
    except UsageError:
        return
