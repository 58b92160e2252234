"""Which single observation explains a misfit: the test of one error at a time, and the suspects it names.

For residuals r with covariance K (whitened, so that K is the redundancy matrix of a
least-squares network), the hypothesis "observation i alone is shifted" has the statistic
w_i = r_i / sqrt(K_ii), standard normal where nothing is shifted, and the estimated shift
r_i / K_ii with variance 1/K_ii (Baarda, A testing procedure for use in geodetic networks,
1968; from memory). The largest |w| is taken out and the rest tested again, until none is left above
the critical value.
"""

from __future__ import annotations

from dataclasses import dataclass
from statistics import NormalDist

import numpy as np

# Variances of whitened residuals lie between 0 and 1; below this one, nothing checks the observation.
REDUNDANCY_FLOOR = 1e-6
# Correlations within this of 1 are 1: the two observations enter every closed path together.
TIE = 1e-6
# More suspects than this in one network say that the stated uncertainties do not hold.
MOST_SUSPECTS = 200


@dataclass(frozen=True)
class Suspect:
    """A line, or a whole band, that disagrees with the others.

    Attributes
    ----------
    isotopologue, band : str
        Such as "28Si32S" and "2-0".
    line : str
        Such as "P(12)"; empty where the whole band of one source is meant.
    size, sigma : float, cm-1
        By how much the position is too high, and the uncertainty of that.
    check : str
        "differences" or "loops".
    place : str
        File and row of the line; for a band, the name of its source.
    rivals : tuple of str
        Suspects that explain the same misfit nearly as well, as band, line and place; the data
        cannot decide between them and this one.
    index : int
        Index of the line in the LineList; -1 for a band.
    """

    isotopologue: str
    band: str
    line: str
    size: float
    sigma: float
    check: str
    place: str
    rivals: tuple[str, ...] = ()
    index: int = -1


@dataclass(frozen=True)
class Finding:
    """One observation found to be shifted, by number; size and sigma in units of the residuals' scale."""

    number: int
    size: float
    sigma: float
    rivals: tuple[int, ...]


@dataclass(frozen=True)
class Threshold:
    """The critical values of a whole check.

    Attributes
    ----------
    false_alarms : float
        Probability that a list without errors yields any suspect.
    tests : int
        Number of observations tested, over all networks.
    """

    false_alarms: float
    tests: int

    @property
    def critical(self) -> float:
        """|w| above this names a suspect: two-sided, the false alarms shared among all tests (Bonferroni)."""
        return -NormalDist().inv_cdf(self.false_alarms / (2 * max(self.tests, 1)))

    @property
    def margin(self) -> float:
        """By how much w^2 of a rival may fall short of the largest.

        If b is shifted, w_a^2 - w_b^2 is near normal with mean -m and variance 4m, m set by how
        different the two explanations are. The worst m gives the probability Phi(-sqrt(margin)) that a
        leads by more than the margin; this margin makes it equal to `false_alarms`.
        """
        return NormalDist().inv_cdf(1 - self.false_alarms) ** 2


def find_suspects(residual, variance, column, threshold: Threshold) -> tuple[Finding, ...]:
    """Name the observations that are shifted, the largest statistic first.

    Parameters
    ----------
    residual, variance : ndarray of float, shape (n,)
        r and the diagonal of K, scaled so that the latter lies between 0 and 1.
    column : callable
        `column(i)` is column i of K, shape (n,).
    threshold : Threshold

    Returns
    -------
    tuple of Finding
        At the most `MOST_SUSPECTS` and their rivals. Sizes are those with all other shifts estimated
        as well; whatever is not significant then is left out.
    """
    start, residual = np.asarray(residual, dtype=float), np.array(residual, dtype=float)
    left = np.array(variance, dtype=float)
    testable = left > REDUNDANCY_FLOOR
    floor = REDUNDANCY_FLOOR * left
    columns: dict[int, np.ndarray] = {}
    reduced: dict[int, np.ndarray] = {}
    rivals: dict[int, list[int]] = {}
    while len(rivals) < MOST_SUSPECTS:
        ratio = np.zeros(len(residual))
        np.divide(residual, np.sqrt(np.maximum(left, 0.0)), out=ratio, where=testable & (left > floor))
        strength = np.abs(ratio)
        if strength.max(initial=0.0) < threshold.critical:
            break
        # The first of exact ties, whatever the rounding.
        chosen = int(np.flatnonzero(strength >= strength.max() * (1 - 1e-9))[0])
        columns[chosen] = column(chosen)
        # What the observations already taken out leave of this column (elimination, pivot by pivot).
        step = columns[chosen].copy()
        for other, earlier in reduced.items():
            step -= earlier * (earlier[chosen] / earlier[other])
        correlation = step / np.sqrt(step[chosen] * np.where(left > floor, left, np.inf))
        rivals[chosen] = _rivals(chosen, ratio, correlation, threshold)
        residual -= step * (residual[chosen] / step[chosen])
        left -= step**2 / step[chosen]
        reduced[chosen] = step
    return _settled(start, column, columns, rivals, threshold)


def _rivals(chosen: int, ratio: np.ndarray, correlation: np.ndarray, threshold: Threshold) -> list[int]:
    """Those that lag by less than the margin and would themselves leave `chosen` unremarkable."""
    apart = np.sqrt(np.maximum(1.0 - correlation**2, 0.0))
    left_over = np.abs(ratio[chosen] - correlation * ratio)
    close = ratio[chosen] ** 2 - ratio**2 < threshold.margin
    close &= left_over <= threshold.critical * apart + TIE * abs(ratio[chosen])
    close[chosen] = False
    return np.flatnonzero(close & (ratio != 0.0)).tolist()


def _settled(residual, column, columns, rivals, threshold: Threshold) -> tuple[Finding, ...]:
    """Estimate all shifts together, take back what is not significant any more, and add the rivals."""
    kept = list(columns)
    while kept:
        size, sigma = _together(residual, columns, kept)
        weakest = int(np.argmin(np.abs(size / sigma)))
        if abs(size[weakest] / sigma[weakest]) >= threshold.critical:
            break
        del kept[weakest]
    findings = []
    named = set(kept)
    for position, number in enumerate(kept):
        group = [rival for rival in rivals[number] if rival not in named]
        named.update(group)
        findings.append(Finding(number, float(size[position]), float(sigma[position]), tuple(group)))
        for rival in group:
            others = [k for k in kept if k != number]
            replaced = {**{k: columns[k] for k in others}, rival: column(rival)}
            rival_size, rival_sigma = _together(residual, replaced, [*others, rival])
            rest = tuple(k for k in (number, *group) if k != rival)
            findings.append(Finding(rival, float(rival_size[-1]), float(rival_sigma[-1]), rest))
    return tuple(findings)


def _together(residual, columns, numbers: list[int]) -> tuple[np.ndarray, np.ndarray]:
    """Shifts of several observations estimated at once, and their standard uncertainties."""
    matrix = np.stack([columns[k][numbers] for k in numbers])
    covariance = np.linalg.solve(matrix, np.eye(len(numbers)))
    return covariance @ residual[numbers], np.sqrt(np.diag(covariance))
