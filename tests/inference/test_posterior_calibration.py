"""Simulation-based calibration: is the truth anywhere in the posterior with equal chance?

The full run over 500 campaigns is in the benchmarks; here are fewer, for the test of every day.
"""

from __future__ import annotations

import pytest
from scipy.stats import chi2
from simulated_campaign import ranks, uniformity

BINS = 8


@pytest.mark.slow
@pytest.mark.parametrize(("model", "campaigns"), [("gaussian", 120), ("student", 50), ("outliers", 50)])
def test_ranks_of_the_truth_are_uniform(model, campaigns):
    found, draws = ranks(model, campaigns=campaigns, seed=20260101)
    # 1 % for all quantities of a model together.
    limit = chi2.isf(0.01 / len(found), BINS - 1)
    for name, rank in found.items():
        square, counts = uniformity(rank, draws, bins=BINS)
        assert square < limit, f"{name}: chi-square {square:.1f}, counts {counts.tolist()}"
