"""The comparison of sets of terms that a fit's predictions take their model part from."""

from __future__ import annotations

from dunhamfit.fit.record import Fit
from dunhamfit.inference.selection import Selection, compare_sets
from dunhamfit.inference.widest import widest_fit


def near_equal_sets(fit: Fit) -> Selection:
    """Compare all sets of terms on the lines of `fit`, with its breakdown and calibration terms and error policy.

    Breakdown terms and priors stay with the terms they belong to.

    Raises
    ------
    CannotDetermine
        If no set of terms can be told from the lines.
    """
    return compare_sets(widest_fit(fit.model, fit.lines, policy=fit.noise.policy))
