"""Correct digits of the certified NIST regressions, here and with general routines.

    python -m benchmarks.arithmetic

NIST/ITL Statistical Reference Datasets, linear regression: fewest correct digits of any
coefficient and of any standard deviation, 15 at the most. statsmodels is optional.
"""

from __future__ import annotations

import warnings
from fractions import Fraction

import numpy as np
import scipy.linalg

from benchmarks.interleaved import print_table
from dunhamfit.algebra.least_squares import refine, sharpened
from dunhamfit.algebra.rows import plain_rows
from dunhamfit.algebra.triangle import covariance_factor, solve
from tests.reference.exact_solution import extended_of
from tests.reference.nist import Certified, certified_sets

try:
    import statsmodels.api
except ImportError:
    statsmodels = None


def digits(found, certified) -> float:
    errors = [
        abs(Fraction(float(f)) - c) / abs(c) if c else abs(Fraction(float(f)))
        for f, c in zip(found, certified, strict=True)
    ]
    return min(15.0, -np.log10(max(float(max(errors)), 1e-16)))


def ours(data: Certified):
    rows = plain_rows(extended_of(data.matrix), extended_of(data.observed))
    triangle = rows.triangle()
    solution = refine(rows, triangle.r, solve(triangle))
    factor = covariance_factor(sharpened(rows, solution.r))
    scatter = solution.chi2 / (len(data.observed) - len(data.values))
    return solution.values, np.sqrt(scatter * (factor**2).sum(axis=1))


def scaled_qr(data: Certified):
    matrix, observed = extended_of(data.matrix).high, extended_of(data.observed).high
    norms = np.linalg.norm(matrix, axis=0)
    q, r = np.linalg.qr(matrix / norms)
    values = scipy.linalg.solve_triangular(r, q.T @ observed) / norms
    scatter = np.sum((observed - matrix @ values) ** 2) / (len(observed) - len(values))
    inverse = scipy.linalg.solve_triangular(r, np.eye(len(values))) / norms[:, None]
    return values, np.sqrt(scatter * (inverse**2).sum(axis=1))


def plain_lstsq(data: Certified):
    matrix, observed = extended_of(data.matrix).high, extended_of(data.observed).high
    return np.linalg.lstsq(matrix, observed, rcond=None)[0], None


def statsmodels_ols(data: Certified):
    matrix, observed = extended_of(data.matrix).high, extended_of(data.observed).high
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # it says itself that Filip is too much for it
        fit = statsmodels.api.OLS(observed, matrix).fit()
    return fit.params, fit.bse


def main() -> None:
    routes = {"dunhamfit": ours, "QR, unit columns": scaled_qr, "numpy lstsq": plain_lstsq}
    if statsmodels:
        routes["statsmodels OLS"] = statsmodels_ols
    else:
        print("statsmodels is not installed, so its column is missing: pip install '.[bench]'")
    rows = []
    for data in certified_sets():
        row = [data.name]
        for route in routes.values():
            values, sigmas = route(data)
            shown = f"{digits(values, data.values):.1f}"
            row.append(shown if sigmas is None else f"{shown} / {digits(sigmas, data.sigmas):.1f}")
        rows.append(row)
    print("correct digits of the worst coefficient / of the worst standard deviation")
    print_table(["set", *routes], rows)


if __name__ == "__main__":
    main()
