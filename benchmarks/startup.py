"""Start-up: what importing, asking for help and a whole command cost, against bare imports.

    python -m benchmarks.startup [REPEATS]

Whole processes, interpreter included; the command reads the list, fits it and stores the run.
"""

from __future__ import annotations

import subprocess
import sys
import tempfile
from pathlib import Path

from benchmarks.interleaved import medians, print_table
from benchmarks.line_lists import REAL_LIST, TERMS

_NAMES = "TermSet, fit_lines, read_lines"
_JOB = f"""
[molecule]
reference = "12C16O"
[[source]]
name = "hitran"
file = "{REAL_LIST}"
format = "hitran"
isotopologue = {{ 1 = "12C16O" }}
[model]
terms = {list(TERMS.orders)}
"""


def process(*arguments: str):
    """An action that runs Python with `arguments` and waits for it."""
    return lambda: subprocess.run([sys.executable, *arguments], check=True, capture_output=True)


def code(text: str):
    return process("-c", text)


def command(*arguments: str):
    return process("-m", "dunhamfit.cli.main", *arguments)


def main(repeats: int = 15) -> None:
    with tempfile.TemporaryDirectory() as folder:
        job = Path(folder) / "co.toml"
        pairs = [
            ("import dunhamfit", code("import dunhamfit"), "numpy, scipy.linalg"),
            (
                "... and the names to fit",
                code("from dunhamfit import TermSet, fit_lines, read_lines"),
                "numpy, scipy.linalg",
            ),
            ("dunhamfit --help", command("--help"), "click"),
        ]
        if REAL_LIST.exists():
            job.write_text(_JOB, encoding="utf-8")
            fit = command("fit", str(job), "-o", str(Path(folder) / "co.h5"), "--quiet")
            pairs.append(("dunhamfit fit, 1,344 lines of CO", fit, "numpy, scipy.linalg, h5py"))
        else:
            print("the reference folder is not beside this checkout: no command on the real list")
        table = []
        for name, action, imports in pairs:
            spent, bare = medians([action, code(f"import {imports}")], repeats)
            table.append([name, f"{spent:.3f}", f"import {imports}", f"{bare:.3f}", f"{spent / bare:.2f}"])
    print_table(["", "s", "against", "s", "ratio"], table)


if __name__ == "__main__":
    main(*(int(text) for text in sys.argv[1:2]))
