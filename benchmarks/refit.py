"""Cost of a refit: a 100-line band added to an archive of a million lines, against the first fit.

    python benchmarks/refit.py [LINES] [FOLDER]

The lines are invented. Both the commands and the functions they call are timed; the first fit
includes reading the text file and storing the run, the refit reading the new file, the test
before the merge, and storing. Every figure is the median of the refits, or of one first fit.
"""

from __future__ import annotations

import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

from dunhamfit.archive.store import open_archive
from dunhamfit.fit.update import update_fit
from dunhamfit.inference.arrival import check_arrival
from dunhamfit.inference.shifts import band_shifts, parameter_shifts
from dunhamfit.job.run import fit_job, read_job_lines
from dunhamfit.job.tables import read_job
from dunhamfit.lines.reading import read_lines

TRUTH = {(1, 0): 701.25, (2, 0): -2.75, (3, 0): 4e-3, (0, 1): 0.3125, (1, 1): -0.0015, (0, 2): -2.5e-7, (1, 2): -4e-10}
SIGMA = 1e-4
REFITS = 5
COLUMNS = {"v_upper": "v1", "v_lower": "v0", "j_upper": "J1", "j_lower": "J0", "position": "nu"}

JOB = """
[molecule]
reference = "28Si32S"
[[source]]
name = "old"
file = "old.csv"
format = "delimited"
isotopologue = "28Si32S"
columns = { v_upper = "v1", v_lower = "v0", j_upper = "J1", j_lower = "J0", position = "nu" }
unit = "cm-1"
uncertainty = 1e-4
coverage_factor = 1
scale = 1e-8
repeats = "both"
[model]
terms = [3, 1, 1]
[errors]
policy = "per-source"
"""


def energy(v, j):
    return sum(value * (v + 0.5) ** k * (j * (j + 1.0)) ** l for (k, l), value in TRUTH.items())


def write_lines(path: Path, bands, j_max: int, repeats: int, rng: np.random.Generator) -> int:
    """R and P lines of the bands, each `repeats` times with its own noise; returns their number."""
    j = np.arange(1, j_max + 1)
    rows = [(upper, lower, j + step, j) for upper, lower in bands for step in (1, -1)]
    columns = [np.concatenate([np.broadcast_to(row[i], j.shape) for row in rows]) for i in range(4)]
    upper, lower, j_upper, j_lower = (np.tile(column, repeats) for column in columns)
    position = energy(upper, j_upper) - energy(lower, j_lower) + rng.normal(0, SIGMA, len(upper))
    with open(path, "w", encoding="utf-8") as file:
        file.write("v1,v0,J1,J0,nu\n")
        table = zip(*(c.tolist() for c in (upper, lower, j_upper, j_lower, position)), strict=True)
        file.writelines(f"{a},{b},{c},{d},{nu:.12f}\n" for a, b, c, d, nu in table)
    return len(upper)


def timed(action):
    start = time.perf_counter()
    result = action()
    return time.perf_counter() - start, result


def command(*arguments: object) -> None:
    subprocess.run(
        [sys.executable, "-m", "dunhamfit.cli.main", *map(str, arguments)], check=True, stdout=subprocess.DEVNULL
    )


def first_fit(job_path: Path, archive: Path):
    job = read_job(job_path)
    reading_time, reading = timed(lambda: read_job_lines(job))
    fit_time, fit = timed(lambda: fit_job(job, reading.lines))

    def store():
        with open_archive(archive, mode="a") as opened:
            opened.save(fit, job_text=job.text)

    return reading_time, fit_time, timed(store)[0]


def one_refit(archive: Path, new: Path, name: str) -> dict[str, float]:
    """Seconds of each step, in one process."""
    parts = {}
    with open_archive(archive, mode="a") as opened:
        parts["load"], old = timed(lambda: opened.load(1))
        read = {"isotopologue": "28Si32S", "columns": COLUMNS, "uncertainty": SIGMA, "name": name}
        parts["read"], lines = timed(lambda: read_lines(new, **read))
        parts["test"], _ = timed(lambda: check_arrival(old, lines))
        parts["update"], fit = timed(lambda: update_fit(old, lines))
        parts["shifts"], _ = timed(lambda: (parameter_shifts(old, fit), band_shifts(old, fit)))
        parts["store"], _ = timed(lambda: opened.save(fit, parent=1))
    return parts


def main(count: int, folder: Path) -> None:
    rng = np.random.default_rng(1)
    bands = [(v + step, v) for step in (1, 2, 3) for v in range(17)]
    written = write_lines(folder / "old.csv", bands, 120, max(1, round(count / (len(bands) * 240))), rng)
    (folder / "job.toml").write_text(JOB, encoding="utf-8")
    for number in range(REFITS + 1):
        write_lines(folder / f"new{number}.csv", [(20, 19)], 50, 1, rng)

    by_command, _ = timed(lambda: command("fit", folder / "job.toml", "-o", folder / "command.h5", "--quiet"))
    parts = first_fit(folder / "job.toml", folder / "api.h5")
    in_process = sum(parts)
    print(
        f"{written} lines; first fit: command {by_command:.2f} s; in process {in_process:.2f} s "
        f"(read {parts[0]:.2f}, fit {parts[1]:.2f}, store {parts[2]:.2f})"
    )
    one_refit(folder / "api.h5", folder / "new0.csv", "warm-up")
    runs = [one_refit(folder / "api.h5", folder / f"new{n}.csv", f"new{n}") for n in range(1, REFITS + 1)]
    median = {key: float(np.median([run[key] for run in runs])) for key in runs[0]}
    whole = float(np.median([sum(run.values()) for run in runs]))
    print(
        f"refit in process {1e3 * whole:.0f} ms ("
        + ", ".join(f"{key} {1e3 * value:.0f}" for key, value in median.items())
        + f"): 1/{in_process / whole:.0f} of the first fit"
    )
    options = ["--isotopologue", "28Si32S", "--uncertainty", SIGMA, "--coverage-factor", 1, "--run", 1, "--quiet"]
    options += ["--columns", ",".join(f"{key}={value}" for key, value in COLUMNS.items())]
    seconds = [
        timed(lambda n=n: command("refit", folder / "command.h5", "--add", folder / f"new{n}.csv", *options))[0]
        for n in range(REFITS)
    ]
    idle, _ = timed(lambda: command("--version"))
    took = float(np.median(seconds))
    print(f"refit command {took:.2f} s: 1/{by_command / took:.0f} of the first fit; 'dunhamfit --version' {idle:.2f} s")
    print(f"archive {(folder / 'api.h5').stat().st_size / 1e6:.1f} MB with {REFITS + 2} runs")


if __name__ == "__main__":
    wanted = int(sys.argv[1]) if len(sys.argv) > 1 else 1_000_000
    if len(sys.argv) > 2:
        main(wanted, Path(sys.argv[2]))
    else:
        with tempfile.TemporaryDirectory() as scratch:
            main(wanted, Path(scratch))
