"""Wrong lines: error bars of robust fits, what the ledger lists, what it proposes, and what all that costs.

    python -m benchmarks.outliers [SETS] [SEED]

Invented campaigns of 726 lines with 2 % of them 20 sigma off (`tests/reference/wrong_lines.py`): the rms of
(fitted - true constant) / sigma should be at most 1.1 with robust weights, and the ledger should list
exactly the planted lines, but for one false alarm in a hundred lists. Then printed lists of 1967 lines with one slip
of labelling or copying each (`tests/reference/misassigned.py`): at least 95 % should get the right
proposal, lists without a slip none.
"""

from __future__ import annotations

import sys
import time
from collections import Counter

import numpy as np

from dunhamfit.algebra.robust import LOSSES
from dunhamfit.fit.noise import POLICIES
from dunhamfit.fit.solve import fit_lines
from dunhamfit.inference.ledger import make_ledger
from dunhamfit.lines.line_list import LineList
from tests.reference.misassigned import KINDS, clean_lines, plant
from tests.reference.thirteen_terms import ISOTOPOLOGUE, TERMS, VALUES
from tests.reference.wrong_lines import lines_of


def fitted(lines: LineList, policy: str, robust: str = "none"):
    return fit_lines(lines, TERMS, reference=ISOTOPOLOGUE, policy=policy, robust=robust)


def error_bars(sets: int, seed: int) -> None:
    """rms z and coverage of 68.3 % intervals, clean and with wrong lines."""
    print(f"{'policy':12}{'loss':10}{'wrong':>7}{'rms z':>8}{'68.3 %':>8}{'95 %':>8}{'factor':>8}{'ms':>8}")
    for policy in POLICIES:
        for wrong in (0.0, 0.02):
            for robust in LOSSES:
                rng = np.random.default_rng(seed)
                z, factors, took = [], [], 0.0
                for _ in range(sets):
                    lines, _ = lines_of(rng, wrong=wrong)
                    start = time.perf_counter()
                    fit = fitted(lines, policy, robust)
                    took += time.perf_counter() - start
                    z.append((fit.values - VALUES) / fit.sigmas)
                    factors.append(fit.noise.factors.mean() if len(fit.noise.factors) else 1.0)
                size = np.abs(z)
                print(
                    f"{policy:12}{robust:10}{wrong:7.0%}{np.sqrt(np.mean(size**2)):8.3f}{np.mean(size < 1):8.3f}"
                    f"{np.mean(size < 1.96):8.3f}{np.mean(factors):8.3f}{took / sets * 1e3:8.1f}"
                )


def ledgers(sets: int, seed: int) -> None:
    """Lists with exactly the planted lines, lines too many and missed, and the time of a ledger."""
    print(f"\n{'policy':12}{'loss':10}{'wrong':>7}{'exact':>8}{'extra':>8}{'missed':>8}{'ms':>8}")
    for policy in POLICIES:
        for robust in ("none", "watson"):
            for wrong in (0.0, 0.02):
                rng = np.random.default_rng(seed)
                exact = extra = missed = 0
                took = 0.0
                for _ in range(sets):
                    lines, planted = lines_of(rng, wrong=wrong)
                    fit = fitted(lines, policy, robust)
                    start = time.perf_counter()
                    found = {entry.index for entry in make_ledger(fit).entries}
                    took += time.perf_counter() - start
                    exact += found == set(planted)
                    extra += len(found - set(planted))
                    missed += len(set(planted) - found)
                print(
                    f"{policy:12}{robust:10}{wrong:7.0%}{exact / sets:8.1%}{extra:8}{missed:8}{took / sets * 1e3:8.1f}"
                )


def slips(sets: int, seed: int) -> None:
    """Right, wrong and missing proposals for planted slips, and proposals for lists without one."""
    print(
        f"\n{'policy':12}{'slips':>7}{'right':>8}{'wrong':>8}{'none':>8}{'others':>8}"
        f"{'clean lists':>13}{'proposals':>11}"
    )
    for policy in ("stated", "per-source"):
        rng = np.random.default_rng(seed)
        count = Counter()
        for number in range(sets):
            lines, slip = plant(clean_lines(rng), KINDS[number % len(KINDS)], rng)
            for entry in make_ledger(fitted(lines, policy)).entries:
                if entry.diagnosis is None or entry.diagnosis.proposal is None:
                    continue
                proposal = entry.diagnosis.proposal
                right = proposal.kind == slip.kind and proposal.reading.startswith(slip.reading)
                count["others" if entry.index != slip.index else "right" if right else "wrong"] += 1
        for _ in range(sets):
            entries = make_ledger(fitted(clean_lines(rng), policy)).entries
            count["clean"] += sum(
                entry.diagnosis is not None and entry.diagnosis.proposal is not None for entry in entries
            )
        none = sets - count["right"] - count["wrong"]
        print(
            f"{policy:12}{sets:7}{count['right']:8}{count['wrong']:8}{none:8}{count['others']:8}{sets:13}{count['clean']:11}"
        )


def main(sets: int = 200, seed: int = 1) -> None:
    error_bars(sets, seed)
    ledgers(sets, seed)
    slips(sets, seed)


if __name__ == "__main__":
    main(*(int(text) for text in sys.argv[1:3]))
