"""Sets of terms: what comparing them costs, whether the true one is found, and how the real list is predicted.

    python -m benchmarks.selection [CAMPAIGNS]

Cost is against one fit of 24 terms with uncertainties as stated. The true set (13 terms,
`tests/reference/thirteen_terms.py`) is looked for in campaigns whose lines reach J = 100, where every
true term shows, and J = 60, where the last ones are within 2 sigma of zero. On the real list each band is
predicted from all others by the recommended set and by those with one term more or less.
"""

from __future__ import annotations

import sys
import warnings

import numpy as np

from benchmarks.interleaved import medians, print_table
from benchmarks.line_lists import REAL_LIST, TERMS, medium_list
from dunhamfit.errors import DunhamfitWarning
from dunhamfit.fit.solve import fit_lines
from dunhamfit.inference.selection import Selection, compare_sets, select_terms
from dunhamfit.lines.line_list import LineList
from dunhamfit.lines.reading import read_lines
from tests.reference import thirteen_terms

_BREAKDOWN = {"C": ("10", "01"), "O": ("10", "01")}


def real_list() -> LineList | None:
    """The whole list of carbon monoxide, six isotopologues; None where the reference folder is missing."""
    if not REAL_LIST.exists():
        return None
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", DunhamfitWarning)
        return read_lines(REAL_LIST, format="hitran")


def cost(name: str, lines: LineList, reference: str, breakdown, policy: str) -> tuple[str, ...]:
    selection = select_terms(lines, reference=reference, breakdown=breakdown, policy=policy)
    plain, compared, whole = medians(
        (
            lambda: fit_lines(lines, TERMS, reference=reference, breakdown=breakdown),
            lambda: compare_sets(selection.wide),
            lambda: select_terms(lines, reference=reference, breakdown=breakdown, policy=policy),
        ),
        7,
    )
    count = len(selection.candidates)
    return (
        f"{name}, {policy}",
        str(int(lines.used.sum())),
        str(count),
        f"{1e3 * plain:.1f} ms",
        f"{60 * compared / count / plain:.1f}",
        f"{whole / plain:.1f}",
    )


def found(j_max: int, campaigns: int) -> tuple[str, ...]:
    near = recommended = 0
    for seed in range(campaigns):
        lines = thirteen_terms.campaign(np.random.default_rng([5, seed]), j_max=j_max)
        selection = select_terms(lines, reference=thirteen_terms.ISOTOPOLOGUE, policy="per-source")
        near += any(item.terms == thirteen_terms.TERMS for item in selection.near_equal)
        recommended += selection.recommended.terms == thirteen_terms.TERMS
    return f"J to {j_max}", str(campaigns), f"{100 * recommended / campaigns:.1f} %", f"{100 * near / campaigns:.1f} %"


def neighbours(selection: Selection) -> list[tuple[str, ...]]:
    """The recommended set against those with one term more or less, band by band."""
    best = selection.recommended
    rows = []
    for item in selection.candidates:
        if len(set(item.terms) ^ set(best.terms)) > 1:
            continue
        told = np.isfinite(item.left_out) & np.isfinite(best.left_out)
        closer, likelier = best.left_out < item.left_out, best.log_predictive > item.log_predictive
        rows.append(
            (
                " ".join(map(str, item.terms.orders)) + (" (recommended)" if item is best else ""),
                f"{item.left_out_error:.3f}",
                "" if item is best else f"{int(closer[told].sum())} of {int(told.sum())}",
                "" if item is best else f"{int(likelier[told].sum())} of {int(told.sum())}",
            )
        )
    return rows


def main(campaigns: int = 200) -> None:
    medium, reference, about = medium_list()
    whole = real_list()
    rows = [cost(about, medium, reference, None, policy) for policy in ("stated", "per-band")]
    if whole is not None:
        rows += [cost("six isotopologues", whole, "12C16O", _BREAKDOWN, policy) for policy in ("stated", "per-band")]
    print_table(("list and policy", "lines", "sets", "plain fit", "60 sets/fit", "whole selection/fit"), rows)
    print()
    head = ("13 true terms", "campaigns", "recommended", "among near-equal sets")
    print_table(head, [found(j_max, campaigns) for j_max in (100, 60)])
    for name, lines, breakdown in ((about, medium, None), ("six isotopologues", whole, _BREAKDOWN)):
        if lines is not None:
            print()
            selection = select_terms(lines, reference=reference, breakdown=breakdown, policy="per-band")
            head = (f"{name}: highest k", "left-out error", "bands the recommended is closer in", "likelier in")
            print_table(head, neighbours(selection))


if __name__ == "__main__":
    main(*map(int, sys.argv[1:]))
