"""Results to standard output or a file, remarks to standard error."""

from __future__ import annotations

import csv
import io
import json
import math
import os
import sys

import click
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from dunhamfit.cli.messages import say, write
from dunhamfit.cli.output import (
    Output,
    file_option,
    json_option,
    json_text,
    parts_text,
    quiet_option,
    terminal_width,
)
from dunhamfit.errors import UsageError
from dunhamfit.show.tables import Column, Table

TABLE = Table("Lines", (Column("band"), Column("position", "decimal", "cm-1")), (("1-0", "744.51(12)"),))
DOCUMENT = {"lines": [{"band": "1-0", "position": 744.51234, "sigma": math.nan}]}

json_values = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(),
    lambda inner: st.lists(inner) | st.dictionaries(st.text(), inner),
)


def output(**options) -> Output:
    return Output(stdout=io.StringIO(), stderr=io.StringIO(), **options)


def without_nan(item):
    if isinstance(item, dict):
        return {key: without_nan(value) for key, value in item.items()}
    if isinstance(item, list):
        return [without_nan(value) for value in item]
    return None if isinstance(item, float) and not math.isfinite(item) else item


def refuse_constant(name):
    raise AssertionError(f"{name} is no JSON (RFC 8259, section 6)")


@given(st.dictionaries(st.text(), json_values))
def test_json_is_strict_and_keeps_every_double(document):
    text = json_text(document)
    assert json.loads(text, parse_constant=refuse_constant) == without_nan(document)
    assert text.isascii()
    assert text.replace("\n", "").isprintable()


def test_numpy_becomes_numbers_and_lists():
    document = {
        "a": np.array([[1.5, np.nan]]),
        "b": np.float64(0.1),
        "c": np.int64(3),
        "d": np.bool_(True),
        "e": (1, 2),
    }
    assert json.loads(json_text(document)) == {"a": [[1.5, None]], "b": 0.1, "c": 3, "d": True, "e": [1, 2]}


def test_what_json_does_not_know_is_refused():
    with pytest.raises(TypeError):
        json_text({"a": object()})


def test_tables_and_paragraphs_for_a_reader():
    out = output()
    out.result(DOCUMENT, [TABLE, "A remark \x1b[2J."])
    assert out.stdout.getvalue() == parts_text([TABLE, "A remark \x1b[2J."], width=80, colour=False)
    assert out.stdout.getvalue().endswith("\n\nA remark \\x1b[2J.\n")


def test_json_alone_on_standard_output():
    out = output(as_json=True)
    out.remark("read 12 lines")
    out.result(DOCUMENT, [TABLE])
    assert json.loads(out.stdout.getvalue()) == {
        "lines": [{"band": "1-0", "position": 744.51234, "sigma": None}]
    }
    assert out.stderr.getvalue() == "read 12 lines\n"


def test_quiet_silences_remarks_but_not_warnings():
    out = output(quiet=True)
    out.remark("read 12 lines")
    out.warn("noise factor 3.1")
    with out.progress("fitting") as report:
        report(1, 2)
    assert out.stderr.getvalue() == "warning: noise factor 3.1\n"


@pytest.mark.parametrize("ending", [".json", ".csv", ".tex", ".txt", ".JSON"])
def test_the_ending_of_the_file_says_what_is_written(tmp_path, ending):
    path = tmp_path / f"result{ending}"
    out = output(path=path)
    out.result(DOCUMENT, [TABLE, "text"], records=DOCUMENT["lines"])
    text = path.read_text(encoding="utf-8")
    assert out.stdout.getvalue() == ""
    assert out.stderr.getvalue() == f"wrote {path}\n"
    if ending == ".csv":
        (row,) = csv.DictReader(io.StringIO(text))
        assert float(row["position"]) == 744.51234
    elif ending == ".tex":
        assert text.startswith(r"\begin{table}")
    elif ending == ".txt":
        assert text == parts_text([TABLE, "text"], width=80, colour=False)
    else:
        assert json.loads(text)["lines"][0]["position"] == 744.51234


@pytest.mark.parametrize(
    ("name", "as_json", "message"),
    [
        ("runs.h5", False, "-o must name a file that ends in .json, .csv, .tex or .txt"),
        ("result", False, "-o must name a file that ends in"),
        ("result.txt", True, "end the name in .json or leave out --json"),
        ("result.csv", False, "this result is not one list; use .json, .tex or .txt"),
    ],
)
def test_a_file_of_another_kind_is_never_touched(tmp_path, name, as_json, message):
    path = tmp_path / name
    path.write_bytes(b"precious")
    with pytest.raises(UsageError, match=message):
        output(path=path, as_json=as_json).result(DOCUMENT, [TABLE])
    assert path.read_bytes() == b"precious"


@pytest.mark.parametrize(("encoding", "rule"), [("utf-8", "─"), ("ascii", "-"), ("latin-1", "-")])
def test_any_encoding_of_the_terminal_will_do(encoding, rule):
    raw = io.BytesIO()
    stream = io.TextIOWrapper(raw, encoding=encoding, newline="\n")
    write("a─b 光\n", stream)
    stream.flush()
    shown = "光" if encoding == "utf-8" else "\\u5149"
    assert raw.getvalue().decode(encoding) == f"a{rule}b {shown}\n"


def test_messages_keep_their_lines_and_lose_their_controls():
    stream = io.StringIO()
    say("one\r\ntwo \x1b[1m", stream)
    assert stream.getvalue() == "one\\r\ntwo \\x1b[1m\n"


def test_the_width_is_80_where_there_is_no_terminal():
    assert terminal_width(io.StringIO()) == 80


@pytest.mark.skipif(os.name == "nt", reason="pseudo-terminals of POSIX")
@pytest.mark.parametrize("columns", [80, 160])
def test_the_width_is_that_of_the_terminal(monkeypatch, columns):
    import fcntl
    import pty
    import struct
    import termios

    monkeypatch.setenv("TERM", "xterm")
    monkeypatch.delenv("NO_COLOR", raising=False)
    leader, follower = pty.openpty()
    try:
        # struct winsize of POSIX terminals: rows, columns, pixels, pixels.
        fcntl.ioctl(follower, termios.TIOCSWINSZ, struct.pack("HHHH", 24, columns, 0, 0))
        with open(follower, "w", encoding="utf-8") as stream:
            assert terminal_width(stream) == columns
            Output(stdout=stream).result(DOCUMENT, [TABLE])
            stream.flush()
            assert b"\x1b[1mLines\x1b[0m" in os.read(leader, 4096)
            monkeypatch.setenv("NO_COLOR", "1")
            Output(stdout=stream).result(DOCUMENT, [TABLE])
            stream.flush()
            assert b"\x1b" not in os.read(leader, 4096)
    finally:
        os.close(leader)


def test_the_options_reach_the_command(tmp_path):
    seen = []

    @click.command()
    @json_option
    @quiet_option
    @file_option
    def command(as_json, quiet, path):
        seen.append(Output(as_json=as_json, quiet=quiet, path=path))

    command.main(["--json", "--quiet", "-o", str(tmp_path / "a.json")], standalone_mode=False)
    assert seen == [
        Output(as_json=True, quiet=True, path=tmp_path / "a.json", stdout=sys.stdout, stderr=sys.stderr)
    ]
