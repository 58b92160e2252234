"""The command `dunhamfit`: finds the command, runs it, turns errors into messages and exit codes.

Commands are loaded only when they are called, so that help is quick. Each lives in a
module of its own that exposes `command`, and returns its exit code, or None for 0.

Exit codes: 0 done; 1 unexpected fault; 2 wrong use; 3 faults in the input; 4 the data
cannot determine the model; 5 did not converge; 6 archive problem; 130 interrupted; 141
the reader of the output went away (128 + the number of the signal, common practice).
"""

from __future__ import annotations

import importlib
import os
import sys
import traceback
import warnings
from collections.abc import Sequence
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from typing import TextIO

import click

import dunhamfit
from dunhamfit.cli.messages import say
from dunhamfit.errors import DunhamfitError, DunhamfitWarning, UsageError

UNEXPECTED, WRONG_USE, INTERRUPTED, READER_GONE = 1, UsageError.exit_code, 130, 141

THREAD_VARIABLES = ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS")

# Command -> module and the line shown by --help, in the order of a day's work.
COMMANDS = {
    "demo": ("dunhamfit.cli.demo", "Write an invented example job into a folder, check it and fit it."),
    "check": ("dunhamfit.cli.check", "Read every source and report every fault in one pass."),
    "fit": ("dunhamfit.cli.fit", "Fit one set of constants to all lines of a job."),
    "refit": ("dunhamfit.cli.refit", "Repeat the latest run, with a new source or a changed choice."),
    "select": ("dunhamfit.cli.select", "Compare candidate sets of terms."),
    "diagnose": ("dunhamfit.cli.diagnose", "Test the residuals; leave out sources and bands; bootstrap."),
    "sample": ("dunhamfit.cli.sample", "Sample the posterior of a run and store it in the archive."),
    "selftest": (
        "dunhamfit.cli.selftest",
        "Simulate your own line list; count how often the error bars cover.",
    ),
    "predict": ("dunhamfit.cli.predict", "Predict lines of any band, with uncertainties."),
    "levels": ("dunhamfit.cli.levels", "List energy levels with uncertainties."),
    "derive": ("dunhamfit.cli.derive", "Derive omega_e, B_e, r_e and their kin, with uncertainties."),
    "compare": ("dunhamfit.cli.compare", "Show how constants and predictions moved between two runs."),
    "history": ("dunhamfit.cli.history", "List the runs of an archive and what each one added."),
    "export": ("dunhamfit.cli.export", "Write constants, covariance, line list, LaTeX tables, figures."),
    "verify": ("dunhamfit.cli.verify", "Refit every run from the archive alone and say whether it agrees."),
}


@dataclass
class _Settings:
    """Global options that must outlive the command that failed."""

    debug: bool = False


class _LazyGroup(click.Group):
    """A group whose help comes from `COMMANDS`, and whose commands are imported when they are called."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in COMMANDS:
            return None
        module, _ = COMMANDS[cmd_name]
        return importlib.import_module(module).command

    def resolve_command(self, ctx: click.Context, args: list[str]):
        if args[0] not in COMMANDS:
            raise click.UsageError(
                f"there is no command '{args[0]}'; use one of {', '.join(COMMANDS)}", ctx=ctx
            )
        return super().resolve_command(ctx, args)

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl([(name, text) for name, (_, text) in COMMANDS.items()])


def _print_version(ctx: click.Context, parameter: click.Parameter, wanted: bool) -> None:
    if wanted:
        click.echo(f"dunhamfit {dunhamfit.__version__}")
        ctx.exit()


@click.group(cls=_LazyGroup, context_settings={"help_option_names": ["-h", "--help"]})
@click.option("--debug", is_flag=True, help="Show the traceback of an error.")
@click.option(
    "--version",
    is_flag=True,
    is_eager=True,
    expose_value=False,
    callback=_print_version,
    help="Show the version.",
)
@click.pass_obj
def _group(settings: _Settings, debug: bool) -> None:
    """Fit one set of Dunham coefficients to every line of a diatomic molecule at once.

    \b
    Start with:  dunhamfit demo
    Help on one command:  dunhamfit COMMAND --help
    """
    settings.debug = debug


def main(argv: Sequence[str] | None = None) -> int:
    """Run one command and return its exit code; messages go to standard error.

    Parameters
    ----------
    argv : sequence of str, optional
        Arguments without the name of the program; those of the process if left out.
    """
    # Matrices of some dozen columns gain nothing from threads and lose much to them on a busy machine. This
    # comes before a command loads a numerical library; who knows better sets the variables.
    for name in THREAD_VARIABLES:
        os.environ.setdefault(name, "1")
    args = list(sys.argv[1:] if argv is None else argv)
    try:
        return _run_with_messages(args or ["--help"])
    except BrokenPipeError:
        _point_at_nothing(sys.stdout)
        _point_at_nothing(sys.stderr)
        return READER_GONE


def _run_with_messages(args: list[str]) -> int:
    """Run the command; every error but a broken pipe becomes a message and an exit code."""
    settings = _Settings()
    try:
        with _warnings_as_messages():
            code = _run(args, settings)
        sys.stdout.flush()
        return code
    except BrokenPipeError:
        raise
    except (KeyboardInterrupt, click.Abort):
        say("dunhamfit: interrupted", sys.stderr)
        return INTERRUPTED
    except Exception as error:
        if settings.debug:
            traceback.print_exc()
        text, code = _explain(error)
        say(f"dunhamfit: {text}", sys.stderr)
        return code


def _run(args: list[str], settings: _Settings) -> int:
    try:
        with _group.make_context("dunhamfit", args, obj=settings) as context:
            return _group.invoke(context) or 0
    except click.exceptions.Exit as request:
        return request.exit_code


def _explain(error: Exception) -> tuple[str, int]:
    """What to tell the user about `error`, and the exit code."""
    if isinstance(error, DunhamfitError):
        return str(error), error.exit_code
    if isinstance(error, click.ClickException):
        context = getattr(error, "ctx", None)
        hint = f" (help: {context.command_path} --help)" if context else ""
        return error.format_message() + hint, WRONG_USE
    if isinstance(error, OSError):
        if error.filename is not None:
            return f"{error.filename}: {error.strerror}", WRONG_USE
        return str(error), UNEXPECTED
    if isinstance(error, MemoryError):
        return "there is not enough memory for this", UNEXPECTED
    what = " ".join(f"{type(error).__name__}: {error}".split())
    return f"unexpected {what}; please report what 'dunhamfit --debug ...' prints", UNEXPECTED


@contextmanager
def _warnings_as_messages():
    """Show the warnings of dunhamfit as messages, without source lines; leave others as they are."""
    with warnings.catch_warnings():
        show_other = warnings.showwarning

        def show(message, category, filename, lineno, file=None, line=None):
            if issubclass(category, DunhamfitWarning):
                say(f"warning: {message}", sys.stderr)
            else:
                show_other(message, category, filename, lineno, file, line)

        warnings.simplefilter("always", DunhamfitWarning)
        warnings.showwarning = show
        yield


def _point_at_nothing(stream: TextIO) -> None:
    """Let what is left in the buffer of `stream` vanish when the interpreter flushes it at exit."""
    # A stream without a file descriptor has no pipe that could complain.
    with suppress(OSError), open(os.devnull, "w") as nowhere:
        os.dup2(nowhere.fileno(), stream.fileno())


if __name__ == "__main__":
    sys.exit(main())
