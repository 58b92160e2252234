"""A quick look at each band: B and D of both its levels from a straight line.

For a band with R and P lines (common practice; sextic and higher distortion neglected)

    [R(J-1) - P(J+1)] / (2J+1) = 2B - 3D - D (2J+1)^2     of the lower level,
    [R(J)   - P(J)  ] / (2J+1)   likewise                 of the upper level,

and for pure rotation, v' = v'',  position / (J''+1) = 2B - 4D (J''+1)^2. Each is a weighted straight
line with intercept 2B and slope -D in q = 3 + (2J+1)^2 or q = 4(J''+1)^2. Offsets of a band cancel in
the differences, not in pure rotation. Where distortion of higher order matters, chi2 says so: then
lower `j_max`.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from dunhamfit.lines.line_list import LineList
from dunhamfit.lines.unusable import refuse_unusable


@dataclass(frozen=True)
class StraightLine:
    """B and D of one vibrational level from one band.

    Attributes
    ----------
    b, d, sigma_b, sigma_d : float, cm-1
        From the stated uncertainties of the lines, not scaled by the scatter.
    correlation : float
        Of B and D.
    points : int
        Differences used; two points leave nothing to judge the line by.
    lines : int
        Transitions that take part.
    j_max : int
        Largest J of the differences (largest J'' in pure rotation).
    chi2 : float
        Weighted sum of squares; its expectation is points - 2.
    """

    b: float
    d: float
    sigma_b: float
    sigma_d: float
    correlation: float
    points: int
    lines: int
    j_max: int
    chi2: float

    @property
    def weighted_rms(self) -> float:
        """sqrt(chi2 / (points - 2)): near 1 where line and uncertainties hold; NaN for two points."""
        return float(np.sqrt(self.chi2 / (self.points - 2))) if self.points > 2 else float("nan")


@dataclass(frozen=True)
class BandLook:
    """The straight lines of one band of one source.

    Attributes
    ----------
    isotopologue : str
    v_upper, v_lower : int
    source : str
    lower, upper : StraightLine or None
        None where fewer than two differences exist. Both rest on the same lines, so their errors are
        correlated; in pure rotation they are one and the same.
    """

    isotopologue: str
    v_upper: int
    v_lower: int
    source: str
    lower: StraightLine | None
    upper: StraightLine | None


def look_at_bands(lines: LineList, *, j_max: int | None = None) -> tuple[BandLook, ...]:
    """B and D of both levels of every band of every source, ordered by isotopologue, band and source.

    Parameters
    ----------
    lines : LineList
        Excluded lines and lines other than P and R take no part; repeats of a transition are averaged.
    j_max : int, optional
        Largest J of the differences to use; all by default.

    Raises
    ------
    UsageError
        If a used line has no finite position or no positive sigma.
    """
    refuse_unusable(lines)
    chosen = np.flatnonzero(lines.used & (np.abs(lines.j_upper - lines.j_lower) == 1))
    part = lines.subset(chosen)
    keys = np.stack([part.isotopologue, part.v_upper, part.v_lower, part.source], axis=1)
    bands, number = np.unique(keys, axis=0, return_inverse=True)
    order = np.argsort(number.ravel(), kind="stable")
    members = np.split(order, np.cumsum(np.bincount(number.ravel()))[:-1]) if len(bands) else []
    looks = []
    for (isotopologue, v_upper, v_lower, source), member in zip(bands.tolist(), members, strict=True):
        lower, upper = _both_levels(part.subset(member), j_max)
        looks.append(
            BandLook(
                lines.isotopologues[isotopologue], v_upper, v_lower, lines.sources[source].name, lower, upper
            )
        )
    return tuple(looks)


def _both_levels(band: LineList, j_max: int | None) -> tuple[StraightLine | None, StraightLine | None]:
    size = int(max(band.j_upper.max(), band.j_lower.max())) + 2
    if j_max is not None:
        size = min(size, j_max + 2)
    r, r_variance = _branch(band, 1, size)
    p, p_variance = _branch(band, -1, size)
    j = np.arange(size - 1)
    if band.v_upper[0] == band.v_lower[0]:
        step = j + 1.0
        line = _fit(j, r[:-1] / step, r_variance[:-1] / step**2, 4.0 * step**2, lines_a_point=1)
        return line, line
    # Ends without a partner are NaN and drop out.
    width = 2.0 * j + 1.0
    q = 3.0 + width**2
    lower = _fit(
        j[1:],
        (r[:-2] - p[2:]) / width[1:],
        (r_variance[:-2] + p_variance[2:]) / width[1:] ** 2,
        q[1:],
        lines_a_point=2,
    )
    upper = _fit(
        j, (r[:-1] - p[:-1]) / width, (r_variance[:-1] + p_variance[:-1]) / width**2, q, lines_a_point=2
    )
    return lower, upper


def _branch(band: LineList, step: int, size: int) -> tuple[np.ndarray, np.ndarray]:
    """Weighted mean and variance of the lines with J' - J'' = step at each J'', NaN where there is none."""
    mine = (band.j_upper - band.j_lower == step) & (band.j_lower < size)
    j, weight = band.j_lower[mine], band.sigma[mine] ** -2.0
    # About the first position of each J'', so that averaging loses no digits.
    first = np.full(size, np.nan)
    first[j[::-1]] = band.position[mine][::-1]
    total = np.bincount(j, weights=weight, minlength=size).astype(float)
    mean = np.bincount(j, weights=weight * (band.position[mine] - first[j]), minlength=size)
    total[total == 0.0] = np.nan
    return first + mean / total, 1.0 / total


def _fit(j, value, variance, q, *, lines_a_point: int) -> StraightLine | None:
    """value = 2B - D q by weighted least squares about the weighted mean of q."""
    found = np.isfinite(value)
    if np.count_nonzero(found) < 2:
        return None
    value, weight, q = value[found], 1.0 / variance[found], q[found]
    q_mean, mean = np.average(q, weights=weight), np.average(value, weights=weight)
    spread = np.sum(weight * (q - q_mean) ** 2)
    slope = np.sum(weight * (q - q_mean) * (value - mean)) / spread
    residual = value - mean - slope * (q - q_mean)
    variance_b = (1.0 / np.sum(weight) + q_mean**2 / spread) / 4.0
    # intercept 2B = mean - slope q_mean and D = -slope, so cov(B, D) = q_mean / (2 spread)
    sigma_b, sigma_d = float(np.sqrt(variance_b)), float(spread**-0.5)
    return StraightLine(
        b=float(mean - slope * q_mean) / 2.0,
        d=float(-slope),
        sigma_b=sigma_b,
        sigma_d=sigma_d,
        correlation=float(q_mean / (2.0 * spread) / (sigma_b * sigma_d)),
        points=len(value),
        lines=lines_a_point * len(value),
        j_max=int(j[found].max()),
        chi2=float(np.sum(weight * residual**2)),
    )
