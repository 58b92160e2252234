"""Fixtures of the reader tests."""

from __future__ import annotations

import pytest

from dunhamfit.lines.reading import Reading, read_source
from dunhamfit.lines.request import SourceRequest


@pytest.fixture
def read_text(tmp_path):
    """Write text or bytes to `lines.csv` and read it as one source with the options given."""

    def read(content: str | bytes, *, check=None, **options) -> Reading:
        path = tmp_path / "lines.csv"
        path.write_bytes(content.encode() if isinstance(content, str) else content)
        options = {"isotopologue": "12C16O", "coverage_factor": 1.0} | options
        request = SourceRequest(name="test", files=(path,), shown=("lines.csv",), **options)
        reading = read_source(request, check_isotopologue=check)
        assert reading.rows == reading.used + reading.excluded + reading.rejected
        return reading

    return read
