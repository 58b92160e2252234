"""The progress bar shows on terminals only."""

from __future__ import annotations

import io

import pytest

from dunhamfit.show.progress import is_terminal, progress


class Terminal(io.StringIO):
    """A stream that says it is a terminal."""

    def isatty(self) -> bool:
        return True


@pytest.fixture(autouse=True)
def capable_terminal(monkeypatch):
    monkeypatch.setenv("TERM", "xterm-256color")


def work(stream, *, quiet=False):
    with progress("sampling", stream=stream, quiet=quiet) as report:
        for done in range(5):
            report(done + 1, 5)
    return stream.getvalue()


def test_a_terminal_shows_label_and_count():
    shown = work(Terminal())
    assert "sampling" in shown
    assert "5/5" in shown


def test_redirected_output_gets_nothing():
    assert work(io.StringIO()) == ""


def test_quiet_gets_nothing():
    assert work(Terminal(), quiet=True) == ""


@pytest.mark.parametrize("variable", ["FORCE_COLOR", "TTY_COMPATIBLE"])
def test_no_environment_variable_forces_a_bar_into_a_file(monkeypatch, variable):
    monkeypatch.setenv(variable, "1")
    assert work(io.StringIO()) == ""


def test_a_dumb_terminal_gets_nothing(monkeypatch):
    monkeypatch.setenv("TERM", "dumb")
    assert not is_terminal(Terminal())
    assert work(Terminal()) == ""


def test_the_cursor_comes_back_after_an_error():
    stream = Terminal()
    with pytest.raises(RuntimeError, match="stop"), progress("sampling", stream=stream) as report:
        report(1, 5)
        raise RuntimeError("stop")
    # ECMA-48 private modes, common practice: ?25l hides the cursor, ?25h shows it.
    assert stream.getvalue().rfind("\x1b[?25h") > stream.getvalue().rfind("\x1b[?25l")


def test_a_label_is_no_markup():
    stream = Terminal()
    with progress("[red]x[/red]", stream=stream) as report:
        report(1, 1)
    assert "[red]x[/red]" in stream.getvalue()
