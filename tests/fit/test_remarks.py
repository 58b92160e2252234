"""What is said of noise factors: each by name where they are few, all together where they are many."""

from __future__ import annotations

import numpy as np

from dunhamfit.fit.noise import Noise
from dunhamfit.fit.remarks import noise_remarks


def noise(factors, determined=None) -> Noise:
    factors = np.array(factors, dtype=float)
    known = np.ones(len(factors), dtype=bool) if determined is None else np.array(determined)
    names = tuple(f"band {i}" for i in range(len(factors)))
    return Noise("per-band", names, np.arange(len(factors)), factors, 0.1 * factors, 50.0 + 0 * factors, known)


def test_few_are_named():
    assert noise_remarks(noise([1.0, 3.0, 0.25, 1.0], [True, True, True, False])) == (
        "band 1: the lines scatter 3 times more than their stated uncertainties say",
        "band 2: the lines scatter 4 times less than their stated uncertainties say",
        "band 3: too few lines to tell a noise factor; the stated uncertainties are kept",
    )


def test_many_are_drawn_together():
    assert noise_remarks(noise([3.0] * 4 + [0.1] * 5 + [1.0] * 2, [True] * 10 + [False])) == (
        "9 of 11 noise factors lie outside 0.5 to 2, from 0.1 to 3: there the lines do not scatter as their stated "
        "uncertainties say",
        "1 of 11 groups have too few lines to tell a noise factor; their stated uncertainties are kept",
    )


def test_usual_factors_need_no_words():
    assert noise_remarks(noise([0.6, 1.0, 1.9])) == ()
