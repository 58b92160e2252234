"""The group of commands: help without loading anything, messages instead of tracebacks, exit codes."""

from __future__ import annotations

import importlib.util
import os
import signal
import subprocess
import sys
import time
import tomllib
import types
import warnings
from pathlib import Path

import click
import pytest

import dunhamfit
from dunhamfit import errors
from dunhamfit.cli.main import COMMANDS, READER_GONE, main

ROOT = Path(__file__).resolve().parents[2]


@pytest.fixture
def stub(monkeypatch):
    """Install a function as the command `fit`; its arguments are any words."""

    def install(function):
        module = types.ModuleType("dunhamfit.cli.stub")
        module.command = click.Command("fit", params=[click.Argument(["words"], nargs=-1)], callback=function)
        monkeypatch.setitem(sys.modules, module.__name__, module)
        monkeypatch.setitem(COMMANDS, "fit", (module.__name__, "A stub."))

    return install


def failing(error):
    def run(words):
        raise error

    return run


# --- exit codes and messages ----------------------------------------------------------------------------

ERRORS = [
    (errors.UsageError("unit 'm' is not known"), 2, "unit 'm' is not known"),
    (errors.InputFaults(["a.csv:3: J=-1"]), 3, "a.csv:3: J=-1"),
    (errors.CannotDetermine("Y50 needs v=5", terms=("Y50",)), 4, "Y50 needs v=5"),
    (errors.NotConverged("no rest after 50 steps"), 5, "no rest after 50 steps"),
    (errors.ArchiveProblem("a.h5 is locked"), 6, "a.h5 is locked"),
    (errors.DunhamfitError("something of ours"), 1, "something of ours"),
    (click.UsageError("no such thing"), 2, "no such thing (help: dunhamfit fit --help)"),
    (click.FileError("a.toml", "no file"), 2, "Could not open file 'a.toml': no file"),
    (FileNotFoundError(2, "No such file or directory", "job.toml"), 2, "job.toml: No such file or directory"),
    (OSError(28, "No space left on device"), 1, "[Errno 28] No space left on device"),
    (MemoryError(), 1, "there is not enough memory for this"),
    (KeyboardInterrupt(), 130, "interrupted"),
    (click.Abort(), 130, "interrupted"),
]


@pytest.mark.parametrize(("error", "code", "message"), ERRORS, ids=lambda item: type(item).__name__)
def test_errors_become_one_message_and_an_exit_code(stub, capsys, error, code, message):
    stub(failing(error))
    assert main(["fit"]) == code
    assert capsys.readouterr() == ("", f"dunhamfit: {message}\n")


def test_an_unexpected_error_is_one_line_that_asks_for_a_report(stub, capsys):
    stub(failing(ZeroDivisionError("float\ndivision")))
    assert main(["fit"]) == 1
    out, err = capsys.readouterr()
    assert out == ""
    what, _, request = err.partition("; ")
    assert what == "dunhamfit: unexpected ZeroDivisionError: float division"
    assert request == "please report what 'dunhamfit --debug ...' prints\n"


def test_the_traceback_comes_with_debug_only(stub, capsys):
    stub(failing(errors.UsageError("wrong")))
    assert main(["--debug", "fit"]) == 2
    err = capsys.readouterr().err
    assert err.startswith("Traceback (most recent call last)")
    assert err.endswith("dunhamfit: wrong\n")


def test_a_command_returns_its_exit_code_or_nothing(stub):
    stub(lambda words: None)
    assert main(["fit"]) == 0
    stub(lambda words: 3)
    assert main(["fit"]) == 3


def test_a_command_may_leave_early(stub):
    stub(lambda words: click.get_current_context().exit(4))
    assert main(["fit"]) == 4


def test_messages_show_control_characters_as_escapes_and_keep_lines(stub, capsys):
    stub(failing(errors.InputFaults([], "one \x1b[2J\ntwo \x9b \udcff")))
    main(["fit"])
    assert capsys.readouterr().err == "dunhamfit: one \\x1b[2J\ntwo \\x9b \\udcff\n"


def test_warnings_of_dunhamfit_become_messages_every_time(stub, capsys):
    def run(words):
        for _ in range(2):
            warnings.warn("noise factor 3.1", errors.DunhamfitWarning, stacklevel=1)

    stub(run)
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        assert main(["fit"]) == 0
    assert capsys.readouterr() == ("", "warning: noise factor 3.1\n" * 2)


def test_other_warnings_are_left_alone_and_the_filters_come_back(stub):
    stub(lambda words: warnings.warn("elsewhere", RuntimeWarning, stacklevel=1))
    before = warnings.filters[:], warnings.showwarning
    with warnings.catch_warnings(), pytest.warns(RuntimeWarning, match="elsewhere"):
        warnings.simplefilter("default")
        main(["fit"])
    assert (warnings.filters[:], warnings.showwarning) == before


# --- wrong use ------------------------------------------------------------------------------------------


def test_an_unknown_command_lists_the_known_ones(capsys):
    assert main(["fot"]) == 2
    err = capsys.readouterr().err
    assert err.startswith("dunhamfit: there is no command 'fot'; use one of demo, check, fit, ")
    assert err.count("\n") == 1


def test_an_unknown_option_points_at_the_help_of_the_command(stub, capsys):
    stub(lambda words: None)
    assert main(["fit", "--nothing"]) == 2
    assert capsys.readouterr().err.endswith("(help: dunhamfit fit --help)\n")


# --- help and version -----------------------------------------------------------------------------------


def test_help_names_every_command_in_the_width_of_a_terminal(capsys):
    assert main(["--help"]) == 0
    out, err = capsys.readouterr()
    assert err == ""
    assert max(map(len, out.splitlines())) <= 80
    for name, (_, text) in COMMANDS.items():
        assert f"  {name}" in out
        assert text in out


def test_no_arguments_show_the_help(capsys):
    assert main([]) == 0
    bare = capsys.readouterr().out
    main(["--help"])
    assert capsys.readouterr().out == bare


def test_version_is_that_of_the_project_file(capsys):
    if not hasattr(dunhamfit, "__version__"):
        pytest.skip("dunhamfit states no version yet")
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    assert main(["--version"]) == 0
    assert capsys.readouterr().out == f"dunhamfit {project['version']}\n"


@pytest.mark.parametrize("name", COMMANDS)
def test_every_command_loads_and_explains_itself(name, capsys):
    module, _ = COMMANDS[name]
    if importlib.util.find_spec(module) is None:
        pytest.skip(f"{module} is not written yet")
    assert main([name, "--help"]) == 0
    out, err = capsys.readouterr()
    assert out.startswith(f"Usage: dunhamfit {name} ")
    assert err == ""


def test_help_loads_neither_numpy_nor_rich_nor_any_command():
    code = (
        "import sys; from dunhamfit.cli.main import main; main(['--help']); "
        "print('LOADED', *sorted(sys.modules))"
    )
    run = subprocess.run([sys.executable, "-c", code], cwd=ROOT, capture_output=True, text=True, check=True)
    loaded = set(run.stdout.rpartition("LOADED ")[2].split())
    assert "click" in loaded
    assert not loaded & {
        "numpy",
        "scipy",
        "rich",
        "h5py",
        "dunhamfit.cli.output",
        *(m for m, _ in COMMANDS.values()),
    }


def test_help_takes_less_than_twice_the_time_of_importing_click():
    def seconds(code: str) -> float:
        start = time.perf_counter()
        subprocess.run([sys.executable, "-c", code], cwd=ROOT, check=True, stdout=subprocess.DEVNULL)
        return time.perf_counter() - start

    # The quickest of several, by turns, since the machine may be busy with something else.
    pairs = [
        (seconds("import click"), seconds("from dunhamfit.cli.main import main; main(['--help'])"))
        for _ in range(7)
    ]
    click_alone, ours = (min(times) for times in zip(*pairs, strict=True))
    assert ours < 2 * click_alone


# --- the process ----------------------------------------------------------------------------------------

STUB = """
import sys, time, types, click
from dunhamfit.cli.main import COMMANDS, main
def endless():
    while True:
        print("a line")
def sleepy():
    print("ready", flush=True)
    time.sleep(60)
stub = types.ModuleType("stub")
stub.command = click.Command("fit", callback={function})
sys.modules["stub"] = stub
COMMANDS["fit"] = ("stub", "")
sys.exit(main(["fit"]))
"""


def start(function: str, *, stderr) -> subprocess.Popen:
    code = STUB.format(function=function)
    return subprocess.Popen(
        [sys.executable, "-c", code], cwd=ROOT, stdout=subprocess.PIPE, stderr=stderr, text=True
    )


def test_a_reader_that_goes_away_is_no_error():
    with start("endless", stderr=subprocess.PIPE) as process:
        process.stdout.readline()
        process.stdout.close()
        assert process.stderr.read() == ""
    assert process.returncode == READER_GONE


def test_nor_is_it_when_messages_go_the_same_way():
    with start("endless", stderr=subprocess.STDOUT) as process:
        process.stdout.readline()
        process.stdout.close()
    assert process.returncode == READER_GONE


@pytest.mark.skipif(os.name == "nt", reason="signals of POSIX")
def test_an_interrupt_from_outside_ends_with_130():
    with start("sleepy", stderr=subprocess.PIPE) as process:
        assert process.stdout.readline() == "ready\n"
        process.send_signal(signal.SIGINT)
        assert process.stderr.read() == "dunhamfit: interrupted\n"
    assert process.returncode == 130
