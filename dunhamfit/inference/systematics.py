r"""Do the residuals of a source, or of one of its bands, follow anything that they should not?

A weighted mean or a slope of residuals is w . e with e the whitened residuals, whose
covariance is 1 - X C X^T (X the whitened rows): its variance is |w|^2 - |F^T X^T w|^2, so that
what the fit has taken away from the residuals is allowed for. What the fit takes away entirely
(the mean of a band whose origin only this band tells) is not tested. Sign runs are counted in
order of m or position and judged by the exact distribution of their number (A. Wald and
J. Wolfowitz, Ann. Math. Stat. 11, 147 (1940)), too few of them being the fault; a fit makes
runs shorter, if anything, so that the test errs on the quiet side.

All tests of a fit are judged together by Holm's method: the chance of any false alarm is held.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy.special import gammaln, logsumexp

from dunhamfit.algebra.criteria import holm, two_sided_tail
from dunhamfit.fit.record import Fit
from dunhamfit.inference.weighted import WeightedLines, weighted_lines, weighted_triangles

# Chance of any false alarm over all tests of a fit.
LEVEL = 0.05
# A statistic of which the fit leaves less than this part of the variance cannot be tested.
_LEAST_LEFT = 1e-3
# Fewer lines than this make no trend and no runs.
_FEWEST = 8


@dataclass(frozen=True)
class Finding:
    """One test of the residuals of a source or band.

    Attributes
    ----------
    source : str
    band : str
        `28Si32S 1-0`, or empty for the whole source.
    lines : int
    test : "mean", "runs", or "trend"
    against : str
        What a trend is against ("J", "m", "position", "v"), or what runs are counted along; empty for a mean.
    size, sigma : float
        Weighted mean residual (cm-1), slope (cm-1 for each unit of `against`), or runs counted, with
        the standard deviation that it would have by chance. For runs, the number expected is `expected`.
    expected : float
        0 but for runs.
    p : float
        Probability of as much by chance, for this test alone.
    adjusted : float
        The same with all tests of the fit allowed for (Holm).
    """

    source: str
    band: str
    lines: int
    test: str
    against: str
    size: float
    sigma: float
    expected: float
    p: float
    adjusted: float = 1.0

    @property
    def z(self) -> float:
        """Size less what is expected, in standard deviations."""
        return (self.size - self.expected) / self.sigma


def find_systematics(fit: Fit) -> tuple[Finding, ...]:
    """All tests of all sources, and of all bands of sources that have several.

    Parameters
    ----------
    fit : Fit

    Returns
    -------
    tuple of Finding
        The least probable first. Report those with `adjusted` below `LEVEL`.

    Raises
    ------
    UsageError
        For a fit whose parameters are tied to each other.
    """
    bench = _Bench(fit)
    groups, lines = fit.groups, fit.lines
    found: list[Finding] = []
    for code in np.unique(groups.source):
        name = lines.sources[code].name
        members = np.flatnonzero(groups.source == code)
        found += bench.tests(np.isin(fit.design.group_of, members), name, "", ("J", "m", "position", "v"), "position")
        for g in members if len(members) > 1 else ():
            band = f"{lines.isotopologues[groups.isotopologue[g]]} {groups.v_upper[g]}-{groups.v_lower[g]}"
            found += bench.tests(fit.design.group_of == g, name, band, ("J", "m"), "m")
    adjusted = holm([item.p for item in found])
    found = [replace(item, adjusted=float(p)) for item, p in zip(found, adjusted, strict=True)]
    return tuple(sorted(found, key=lambda item: item.p))


def in_words(finding: Finding) -> str:
    """One sentence that says what was found."""
    where = f"{finding.source} {finding.band}".strip()
    chance = f"p = {finding.adjusted:.1g} with all tests allowed for"
    if finding.test == "mean":
        return (
            f"{where}: the {finding.lines} residuals have the mean {finding.size:.2g}({finding.sigma:.1g}) cm-1, "
            f"{finding.z:+.1f} standard deviations from zero ({chance})"
        )
    if finding.test == "runs":
        return (
            f"{where}: along {finding.against} the signs of the {finding.lines} residuals make {finding.size:.0f} runs "
            f"where {finding.expected:.0f}({finding.sigma:.0f}) are expected: neighbours deviate together ({chance})"
        )
    unit = " cm-1 per cm-1" if finding.against == "position" else " cm-1 per unit"
    return (
        f"{where}: the residuals change with {finding.against} by {finding.size:.2g}({finding.sigma:.1g}){unit}, "
        f"{finding.z:+.1f} standard deviations from none ({chance})"
    )


class _Bench:
    """Residuals, rows and the quantities they may follow."""

    def __init__(self, fit: Fit):
        used, lines = fit.design.used, fit.lines
        self.rows: WeightedLines = weighted_lines(fit, weighted_triangles(fit))
        upper, lower = lines.j_upper[used].astype(float), lines.j_lower[used].astype(float)
        self.against = {
            "J": lower,
            # J'' + 1 in the R branch, -J'' in the P branch.
            "m": (upper * (upper + 1) - lower * (lower + 1)) / 2,
            "position": lines.position[used],
            "v": lines.v_upper[used].astype(float),
        }
        degrees = fit.noise.degrees[fit.noise.label] if len(fit.noise.factors) else np.full(len(fit.groups), np.inf)
        self.degrees = np.maximum(degrees, 1.0)[fit.design.group_of]

    def tests(self, chosen, source: str, band: str, trends, along: str) -> list[Finding]:
        """Every test of the chosen lines that can be made."""
        place = np.flatnonzero(chosen)
        scale = self.rows.scale[place]
        found = [self._linear(place, scale, source, band, "mean", "")]
        if len(place) >= _FEWEST:
            for name in trends:
                if name == "J" and self._one_branch(place):
                    continue  # m says the same
                x = self.against[name][place]
                w = scale * (x - np.average(x, weights=scale**2))
                found.append(self._linear(place, w, source, band, "trend", name))
            found.append(self._runs(place, source, band, along))
        return [item for item in found if item is not None]

    def _linear(self, place, w, source, band, test, against) -> Finding | None:
        """The mean (w the scale) or slope (w the scale times the centred quantity), which is w . e over w . w."""
        size = float(w @ w)
        taken = self._projected(place, w)
        left = size - float(taken @ taken)
        if not left > _LEAST_LEFT * size or len(place) < 2:
            return None
        value, sigma = float(w @ self.rows.residuals[place]) / size, np.sqrt(left) / size
        p = float(two_sided_tail(value / sigma, float(self.degrees[place].min())))
        return Finding(source, band, len(place), test, against, value, float(sigma), 0.0, p)

    def _one_branch(self, place) -> bool:
        return bool(np.ptp(np.abs(self.against["m"][place]) - self.against["J"][place]) == 0)

    def _projected(self, place, w) -> np.ndarray:
        """w on the orthonormal coordinates of the parameters, shape (q,)."""
        row_of, w = self.rows.row_of[place], self.rows.root[place] * w
        if len(place) < len(self.rows.shares):
            return self.rows.shares[row_of].T @ w
        return self.rows.shares.T @ np.bincount(row_of, w, len(self.rows.shares))

    def _runs(self, place, source, band, along) -> Finding | None:
        signs = self.rows.residuals[place[np.argsort(self.against[along][place], kind="stable")]] > 0
        plus, total = int(signs.sum()), len(signs)
        minus = total - plus
        if min(plus, minus) < 2:
            return None
        runs = 1 + int(np.sum(signs[1:] != signs[:-1]))
        pairs = 2.0 * plus * minus
        sigma = np.sqrt(pairs * (pairs - total) / (total**2 * (total - 1.0)))
        expected = 1 + pairs / total
        return Finding(source, band, total, "runs", along, runs, float(sigma), expected, _few_runs(runs, plus, minus))


def _few_runs(runs: int, plus: int, minus: int) -> float:
    """Probability of `runs` or fewer in a random order of so many signs of each kind."""
    each = np.arange(2, runs + 1)
    half, odd = each // 2, each % 2 == 1
    # 2k runs: k of either sign; 2k + 1: k + 1 of one and k of the other, either way.
    even_ways = np.log(2) + _log_choose(plus - 1, half - 1) + _log_choose(minus - 1, half - 1)
    odd_ways = np.logaddexp(
        _log_choose(plus - 1, half) + _log_choose(minus - 1, half - 1),
        _log_choose(plus - 1, half - 1) + _log_choose(minus - 1, half),
    )
    ways = np.where(odd, odd_ways, even_ways)
    return float(min(np.exp(logsumexp(ways) - _log_choose(plus + minus, np.array(plus))), 1.0))


def _log_choose(n: int, k: np.ndarray) -> np.ndarray:
    """ln of the binomial coefficient; -inf where k > n."""
    inside = k <= n
    kept = np.where(inside, k, 0)
    return np.where(inside, gammaln(n + 1.0) - gammaln(kept + 1.0) - gammaln(n - kept + 1.0), -np.inf)
