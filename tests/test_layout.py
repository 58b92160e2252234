"""The layout of the code: who may import whom, how long a file may be, and calls that are never made.

Everything is read from the source with `ast`, so that nothing has to be imported; only the last
tests start Python, to see what an import loads.
"""

from __future__ import annotations

import ast
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
PACKAGE = ROOT / "dunhamfit"

# Rows from top to bottom. A file imports from its own folder and from rows below its own.
ROWS = (
    ("cli", "__main__"),
    ("job",),
    ("show", "results", "archive"),
    ("inference",),
    ("fit",),
    ("lines", "algebra", "molecule"),
    ("units",),
    ("errors",),
)
RANK = {place: len(ROWS) - row for row, places in enumerate(ROWS) for place in places}
# What loads on demand, by name: two tables, and the route to fits that need lmfit.
LAZY = {PACKAGE / "__init__.py", PACKAGE / "cli" / "main.py", PACKAGE / "inference" / "routes.py"}

LONGEST_FILE = 400

# Last part of the called name -> why it is never called in this program.
BANNED_CALLS = {
    "inv": "error bars come from triangular solves; an inverse loses digits",
    "pinv": "answers a model that the data cannot determine, instead of refusing it",
    "lstsq": "truncates silently where the data cannot determine the model",
    "eval": "nothing that a file says is ever evaluated",
    "exec": "nothing that a file says is ever evaluated",
    "import_module": "imports stand at the top of the file",
    "__import__": "imports stand at the top of the file",
}
BANNED_MODULES = {"pickle", "cPickle", "dill", "cloudpickle", "joblib", "marshal", "shelve"}
SLOW_MODULES = {"h5py", "emcee", "lmfit", "pandas", "matplotlib", "corner"}

FILES = sorted(path for path in PACKAGE.rglob("*.py") if "__pycache__" not in path.parts)


def name(path: Path) -> str:
    return path.relative_to(ROOT).as_posix()


every_file = pytest.mark.parametrize("path", FILES, ids=name)


def tree(path: Path) -> ast.Module:
    return ast.parse(path.read_text(encoding="utf-8"), filename=name(path))


def place(path: Path) -> str:
    """The folder or top-level file that decides the row."""
    return path.relative_to(PACKAGE).parts[0].removesuffix(".py")


def imported(node: ast.Import | ast.ImportFrom) -> Iterator[str]:
    """Full names of what an import statement brings in."""
    if isinstance(node, ast.Import):
        yield from (alias.name for alias in node.names)
    else:
        yield from (f"{node.module}.{alias.name}" for alias in node.names)


def imports(module: ast.Module) -> list[ast.Import | ast.ImportFrom]:
    return [node for node in ast.walk(module) if isinstance(node, (ast.Import, ast.ImportFrom))]


def own_places(module: ast.Module) -> list[tuple[int, str]]:
    """Line and place of every import from dunhamfit itself; the place is empty for the package and its names."""
    found = []
    for node in imports(module):
        for full in imported(node):
            package, _, rest = full.partition(".")
            if package == "dunhamfit":
                target = rest.partition(".")[0]
                found.append((node.lineno, target if target in RANK else ""))
    return found


def allowed(importer: str, target: str) -> bool:
    return importer == target or RANK[target] < RANK[importer]


# --- layers ---------------------------------------------------------------------------------------------


def test_there_is_something_to_look_at():
    assert PACKAGE / "errors.py" in FILES


@every_file
def test_every_file_has_a_place_in_the_layers(path):
    assert path == PACKAGE / "__init__.py" or place(path) in RANK


@every_file
def test_imports_point_down_only(path):
    if path == PACKAGE / "__init__.py":
        return
    wrong = [
        f"{name(path)}:{line}: {place(path)} must not import {target or 'the package itself'}"
        for line, target in own_places(tree(path))
        if not (allowed(place(path), target) if target else path in LAZY)
    ]
    assert not wrong, "\n".join(wrong)


@every_file
def test_imports_are_absolute_and_at_the_top(path):
    """Module level only, and before anything else but the docstring."""
    module = tree(path)
    relative = [node.lineno for node in imports(module) if isinstance(node, ast.ImportFrom) and node.level]
    assert not relative, f"relative imports in lines {relative}"
    nested = [node.lineno for node in imports(module) if node not in module.body]
    assert not nested, f"imports below the top level in lines {nested}"
    kinds = [isinstance(node, (ast.Import, ast.ImportFrom)) for node in module.body if not is_docstring(node)]
    assert kinds == sorted(kinds, reverse=True), "an import stands below other code"


def is_docstring(node: ast.stmt) -> bool:
    return isinstance(node, ast.Expr) and isinstance(node.value, ast.Constant)


@pytest.mark.parametrize(
    ("importer", "target", "fine"),
    [
        ("cli", "job", True),
        ("cli", "archive", True),
        ("job", "show", True),
        ("show", "fit", True),
        ("show", "show", True),
        ("inference", "fit", True),
        ("fit", "lines", True),
        ("lines", "errors", True),
        ("show", "archive", False),
        ("archive", "results", False),
        ("results", "show", False),
        ("lines", "molecule", False),
        ("algebra", "lines", False),
        ("fit", "inference", False),
        ("archive", "job", False),
        ("errors", "lines", False),
    ],
)
def test_the_rule_itself(importer, target, fine):
    assert allowed(importer, target) == fine


# --- length and banned calls ------------------------------------------------------------------------------


@every_file
def test_no_file_is_longer_than_400_lines(path):
    assert len(path.read_text(encoding="utf-8").splitlines()) <= LONGEST_FILE


def called_name(function: ast.expr) -> str:
    if isinstance(function, ast.Name):
        return function.id
    return function.attr if isinstance(function, ast.Attribute) else ""


def banned(module: ast.Module, *, lazy: bool) -> list[str]:
    """Every banned call, and every banned name that is imported under whatever alias, with its reason."""
    found = []
    for node in ast.walk(module):
        if isinstance(node, ast.Call):
            names = [called_name(node.func)]
            if isinstance(node.func, ast.Name) and node.func.id == "print":
                found.append(f"line {node.lineno}: print: the library never prints; commands write through Output")
        elif isinstance(node, ast.ImportFrom):
            names = [alias.name for alias in node.names]
        else:
            continue
        found += [
            f"line {node.lineno}: {each}: {BANNED_CALLS[each]}"
            for each in names
            if each in BANNED_CALLS and not (lazy and each == "import_module")
        ]
    return found


@every_file
def test_banned_calls(path):
    assert banned(tree(path), lazy=path in LAZY) == []


@every_file
def test_nothing_that_runs_code_from_files_is_imported(path):
    names = {full.split(".")[0] for node in imports(tree(path)) for full in imported(node)}
    assert not names & BANNED_MODULES


@pytest.mark.parametrize(
    "code",
    [
        "np.linalg.inv(a)",
        "inv(a)",
        "scipy.linalg.pinv(a)",
        "numpy.linalg.lstsq(a, b)",
        "from scipy.linalg import lstsq as solve",
        "eval(text)",
        "frame.eval(text)",
        "exec(text)",
        "print(1)",
        "def f():\n    return [inv(x) for x in y]",
    ],
)
def test_banned_calls_are_seen(code):
    assert banned(ast.parse(code), lazy=False)


@pytest.mark.parametrize(
    "code", ["ast.literal_eval(text)", "re.compile(p)", "inverse(a)", "invalid(a)", "'eval(x)'", "console.print(1)"]
)
def test_others_are_not(code):
    assert not banned(ast.parse(code), lazy=False)


# --- what an import loads ---------------------------------------------------------------------------------


@pytest.mark.parametrize("code", ["import dunhamfit", "import dunhamfit; dunhamfit.fit_lines"])
def test_fitting_loads_no_slow_module(code):
    if "fit_lines" in code and not (PACKAGE / "fit" / "solve.py").exists():
        pytest.skip("dunhamfit.fit_lines is not written yet")
    run = subprocess.run(
        [sys.executable, "-c", f"{code}\nimport sys; print(*sys.modules)"],
        cwd=ROOT,
        capture_output=True,
        text=True,
        check=True,
    )
    loaded = {module.split(".")[0] for module in run.stdout.split()}
    assert "dunhamfit" in loaded
    assert not loaded & SLOW_MODULES
