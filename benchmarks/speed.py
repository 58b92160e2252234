"""One fit against what a user would otherwise write, on the same rows: time beside the largest error.

    python -m benchmarks.speed [REPEATS]

`fit_lines` makes the design rows, fits, and gives covariance and statistics; the others start
from the finished rows, whitened. Errors are those against an 80-digit solution: of a constant in
units of its sigma, and of a sigma as a part of itself. statsmodels is optional.
"""

from __future__ import annotations

import sys
import warnings

import lmfit
import numpy as np
import scipy.linalg

from benchmarks.interleaved import medians, print_table
from benchmarks.line_lists import TERMS, medium_list
from dunhamfit.fit.solve import fit_lines
from tests.reference.exact_fit import distance_in_sigma, exact_fit

try:
    import statsmodels.api
except ImportError:
    statsmodels = None

# The minimiser takes far longer: it runs once for so many turns of the others.
_SLOW = 50


def main(repeats: int = 200) -> None:
    lines, reference, about = medium_list()
    fit = fit_lines(lines, TERMS, reference=reference)
    rows = fit.design.rows
    whitened, target = np.ascontiguousarray(rows.whitened), rows.observed.high * rows.scale
    matrix, weights = whitened / rows.scale[:, None], rows.scale**2
    norms = np.linalg.norm(whitened, axis=0)
    unit = whitened / norms
    values, sigmas = exact_fit(fit.model, lines)

    def whole():
        made = fit_lines(lines, TERMS, reference=reference)
        return made.values, made.sigmas

    def bare():
        return scipy.linalg.lstsq(unit, target)[0] / norms, None

    def scaling_too():
        size = np.linalg.norm(whitened, axis=0)
        return scipy.linalg.lstsq(whitened / size, target)[0] / size, None

    def numpy_plain():
        return np.linalg.lstsq(whitened, target, rcond=None)[0], None

    def weighted_routine():
        made = statsmodels.api.WLS(rows.observed.high, matrix, weights=weights).fit(cov_type="fixed scale")
        return made.params, made.bse

    def minimiser():
        parameters = lmfit.Parameters()
        for term in TERMS:
            parameters.add(term.name, value=0.0)
        made = lmfit.minimize(
            lambda p: whitened @ np.array([p[term.name].value for term in TERMS]) - target,
            parameters,
            scale_covar=False,
        )
        errors = [made.params[term.name].stderr for term in TERMS]
        return np.array(
            [made.params[term.name].value for term in TERMS]
        ), None if None in errors else np.array(errors)

    routes = {
        "dunhamfit.fit_lines, from lines to statistics": whole,
        "scipy.linalg.lstsq, unit columns ready": bare,
        "scipy.linalg.lstsq, scaling to unit columns": scaling_too,
        "numpy.linalg.lstsq, rows as they are": numpy_plain,
    }
    if statsmodels:
        routes["statsmodels WLS, rows as they are"] = weighted_routine
    else:
        print("statsmodels is not installed, so its row is missing: pip install '.[bench]'")
    with warnings.catch_warnings():
        warnings.simplefilter(
            "ignore"
        )  # some of the routines say themselves that the rows are too much for them
        times = dict(zip(routes, medians(list(routes.values()), repeats), strict=True))
        routes["lmfit.minimize, rows as they are"] = minimiser
        (times["lmfit.minimize, rows as they are"],) = medians([minimiser], max(1, repeats // _SLOW))
        results = {name: route() for name, route in routes.items()}
    baseline = times["scipy.linalg.lstsq, unit columns ready"]
    print(
        f"{len(lines)} lines ({about}), {len(TERMS)} terms, condition {fit.statistics.condition:.1e} in unit columns"
    )
    table = []
    for name, (found, errors) in results.items():
        error = distance_in_sigma(found, values, sigmas).max()
        of_sigma = "" if errors is None else f"{np.abs(errors / sigmas.astype(float) - 1).max():.0e}"
        table.append(
            [name, f"{times[name] * 1e3:.2f}", f"{times[name] / baseline:.2f}", f"{error:.0e}", of_sigma]
        )
    print_table(["", "ms", "ratio", "error / sigma", "error of sigma"], table)


if __name__ == "__main__":
    main(*(int(text) for text in sys.argv[1:2]))
