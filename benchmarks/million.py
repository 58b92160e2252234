"""One million lines and 38 terms: time and memory against a bare QR factorisation of the ready matrix.

    python -m benchmarks.million [LINES]

Each side runs in processes of its own that load their input from a file and then do one thing:
`fit_lines` from a LineList to statistics, or `numpy.linalg.qr(matrix, mode="r")` of as many rows and
columns, which yields neither design rows nor constants nor errors. Peak memory is that of the whole
process, and what the call adds to what was held before it. The lines are invented; a million of them
have some thousands of distinct transitions, as in any real list of that length.
"""

from __future__ import annotations

import json
import statistics
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

from benchmarks.interleaved import print_table
from benchmarks.line_lists import invented_lines
from dunhamfit.fit.solve import fit_lines
from dunhamfit.lines.line_list import LineList, Source, line_columns
from dunhamfit.molecule.terms import TermSet

TERMS = TermSet.from_orders([9, 8, 7, 6, 4])
_BANDS = np.array([(v + step, v) for v in range(10) for step in (1, 2, 3)])
_J_MAX = 120
_TURNS = 3


def write_lines(folder: Path, count: int) -> None:
    rng = np.random.default_rng(1)
    upper, lower = _BANDS[rng.integers(0, len(_BANDS), count)].T
    j_lower = rng.integers(1, _J_MAX, count)
    lines = invented_lines(upper, lower, j_lower + rng.choice([1, -1], count), j_lower, seed=2)
    for item in line_columns():
        np.save(folder / f"{item.name}.npy", getattr(lines, item.name))


def memory(field: str) -> float:
    """VmRSS (held now) or VmHWM (peak so far) of this process in MB, as Linux counts them."""
    status = Path("/proc/self/status").read_text(encoding="ascii")
    return int(next(line.split()[1] for line in status.splitlines() if line.startswith(field))) / 1024


def measured(action) -> dict[str, float]:
    """Seconds of the call, and peak memory in MB: of the process, and over what it held before."""
    before = memory("VmRSS")
    start = time.perf_counter()
    action()
    seconds = time.perf_counter() - start
    return {"seconds": seconds, "peak": memory("VmHWM"), "added": memory("VmHWM") - before}


def fit_side(folder: Path) -> dict[str, float]:
    columns = {item.name: np.load(folder / f"{item.name}.npy") for item in line_columns()}
    lines = LineList(**columns, isotopologues=("28Si32S",), sources=(Source("invented"),))
    del columns
    return measured(lambda: fit_lines(lines, TERMS, reference="28Si32S"))


def qr_side(folder: Path) -> dict[str, float]:
    matrix = np.load(folder / "matrix.npy")
    return measured(lambda: np.linalg.qr(matrix, mode="r"))


SIDES = {"fit": fit_side, "qr": qr_side}


def main(count: int = 1_000_000) -> None:
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        write_lines(folder, count)
        np.save(folder / "matrix.npy", np.random.default_rng(3).normal(size=(count, len(TERMS))))
        results = {side: [] for side in SIDES}
        for _ in range(_TURNS):
            for side, found in results.items():
                command = [sys.executable, "-m", "benchmarks.million", side, str(folder)]
                found.append(
                    json.loads(subprocess.run(command, check=True, capture_output=True, text=True).stdout)
                )
    medians = {
        side: {key: statistics.median(item[key] for item in found) for key in found[0]}
        for side, found in results.items()
    }
    fit, qr = medians["fit"], medians["qr"]
    print(f"{count:,} lines, {len(TERMS)} terms; medians of {_TURNS} processes a side, in turns")
    head = ["", "fit_lines", "numpy qr, mode='r'", "ratio"]
    labels = {
        "seconds": "time of the call, s",
        "peak": "peak of the process, MB",
        "added": "added by the call, MB",
    }
    print_table(
        head,
        [
            [text, f"{fit[key]:.2f}", f"{qr[key]:.2f}", f"{fit[key] / qr[key]:.2f}"]
            for key, text in labels.items()
        ],
    )


if __name__ == "__main__":
    if sys.argv[1:2] and sys.argv[1] in SIDES:
        print(json.dumps(SIDES[sys.argv[1]](Path(sys.argv[2]))))
    else:
        main(*(int(text) for text in sys.argv[1:2]))
