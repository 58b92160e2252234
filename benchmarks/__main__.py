"""Run benchmarks and print their tables.

    python -m benchmarks [NAME ...]

Without a name all of them run, one after the other, each in a process of its own. Figures
that matter are ratios of medians over interleaved runs, since times alone say more of the
machine than of the program. Run from the top of the checkout, on an otherwise idle machine.
"""

from __future__ import annotations

import subprocess
import sys

# Name -> arguments of `python -m benchmarks.NAME`, and what it measures.
BENCHMARKS = {
    "arithmetic": ((), "correct digits of the certified NIST regressions"),
    "speed": ((), "one fit against the general routines on the same rows: time beside error"),
    "million": ((), "one million lines: time and memory against a bare QR factorisation"),
    "startup": ((), "import, help and a whole command, against bare imports"),
    "resampling": ((), "noise factors, calibration terms and resampling against the plain fit"),
    "refit": ((), "a band added to an archive of a million lines against the first fit"),
    "coverage": ((), "how often the error bars hold the truth, over simulated campaigns"),
    "outliers": ((), "robust fits and the ledger of outliers, over simulated lists"),
    "selection": ((), "what comparing sets of terms costs, and how often the true one is found"),
    "posterior": (("speed",), "effective samples a second, against emcee as its manual sets it up"),
}


def main(names: list[str]) -> int:
    unknown = [name for name in names if name not in BENCHMARKS]
    if unknown:
        print(__doc__)
        print("\n".join(f"{name:12}{about}" for name, (_, about) in BENCHMARKS.items()))
        return 0 if unknown == ["--help"] else 2
    failed = []
    for name in names or BENCHMARKS:
        arguments, about = BENCHMARKS[name]
        print(f"\n== {name}: {about}", flush=True)
        if subprocess.run([sys.executable, "-m", f"benchmarks.{name}", *arguments], check=False).returncode:
            failed.append(name)
    if failed:
        print(f"\nnot finished: {', '.join(failed)}")
    return 1 if failed else 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
