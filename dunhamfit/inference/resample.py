"""How far the constants rest on single bands, sources or lines: leave-one-out and the bootstrap, from triangles.

Noise factors are held at those of the fit throughout, and the weights of a robust fit too.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from dunhamfit.algebra.criteria import chi2_tail
from dunhamfit.algebra.leave_out import leave_out
from dunhamfit.algebra.triangle import Triangle, covariance_factor, reduce_rows, solve
from dunhamfit.errors import CannotDetermine, UsageError
from dunhamfit.fit.record import Fit
from dunhamfit.inference.weighted import Weighted, weighted_lines, weighted_triangles

# Fewer resamples than this part determining the constants, and their spread says little about the rest.
_ENOUGH = 0.5
# A resample that leaves some combination of the constants this many times less certain has lost it.
_HARDLY = 1e3


@dataclass(frozen=True, eq=False)
class DroppedGroup:
    """The fit without one band or source.

    Attributes
    ----------
    label : str
    lines : int
    undetermined : tuple of str
        Constants that the other lines cannot tell; the numbers below then say nothing.
    values : ndarray of float, shape (p,)
        All parameters without the group; those of the fit where they cannot be told.
    shifts : ndarray of float, shape (p,)
        `values` less those of the fit.
    shift_sigmas : ndarray of float, shape (p,)
        Standard deviation of each shift, sqrt(diag(C_without - C)); infinite where it cannot be told.
    chi2, dof, p : float, int, float
        Residuals of the group about its prediction by all others, against the full covariance of the
        prediction, and the probability of a larger chi-square. NaN never: 1 where it cannot be told.
    error : float
        Root mean square of those residuals over the uncertainties of the lines; infinite where it cannot be told.
    """

    label: str
    lines: int
    undetermined: tuple[str, ...]
    values: np.ndarray
    shifts: np.ndarray
    shift_sigmas: np.ndarray
    chi2: float
    dof: int
    p: float
    error: float

    @property
    def determined(self) -> bool:
        return not self.undetermined


@dataclass(frozen=True, eq=False)
class Bootstrap:
    """Parameters of resampled lines or bands.

    Attributes
    ----------
    by : "line" or "band"
    names : tuple of str
        All parameters of the model.
    values : ndarray of float, shape (resamples, p)
    undetermined : int
        Further resamples that could not determine the model, or hardly, and are left out.
    seed : int
    """

    by: str
    names: tuple[str, ...]
    values: np.ndarray
    undetermined: int
    seed: int

    @property
    def sigmas(self) -> np.ndarray:
        """Standard deviation of each parameter over the resamples, shape (p,)."""
        return self.values.std(axis=0, ddof=1)

    def percentiles(self, levels=(15.865, 50.0, 84.135)) -> np.ndarray:
        """Percentiles of each parameter, shape (levels, p)."""
        return np.percentile(self.values, levels, axis=0)


def band_labels(fit: Fit) -> tuple[np.ndarray, tuple[str, ...]]:
    """The band (of one isotopologue, all sources together) of each group of lines, and the names of the bands."""
    groups = fit.groups
    keys = np.stack([groups.isotopologue, groups.v_upper, groups.v_lower])
    bands, label = np.unique(keys, axis=1, return_inverse=True)
    names = tuple(f"{fit.lines.isotopologues[code]} {upper}-{lower}" for code, upper, lower in bands.T)
    return label, names


def source_labels(fit: Fit) -> tuple[np.ndarray, tuple[str, ...]]:
    """The source of each group of lines, and the names of the sources that are used."""
    codes, label = np.unique(fit.groups.source, return_inverse=True)
    return label, tuple(fit.lines.sources[code].name for code in codes)


def labels_by(fit: Fit, by: str) -> tuple[np.ndarray, tuple[str, ...]]:
    """`band_labels` or `source_labels`.

    Raises
    ------
    UsageError
        For another word than "band" or "source".
    """
    if by not in ("band", "source"):
        raise UsageError(f"lines can be left out by 'band' or by 'source' (got {by!r})")
    return band_labels(fit) if by == "band" else source_labels(fit)


def leave_one_out(fit: Fit, by: str = "band") -> tuple[DroppedGroup, ...]:
    """The fit without each band, or without each source, in turn.

    Parameters
    ----------
    fit : Fit
    by : "band" or "source"

    Returns
    -------
    tuple of DroppedGroup
        In the order of the bands or sources of the fit.

    Raises
    ------
    UsageError
        For another `by`, or a fit whose parameters are tied to each other.
    """
    labels, names = labels_by(fit, by)
    weighted = weighted_triangles(fit)
    nuisance = [i for i, place in enumerate(weighted.free) if fit.model.parameters[place].source]
    found = leave_out(
        [*weighted.groups, *weighted.priors],
        np.concatenate([labels, np.full(len(weighted.priors), -1)]),
        nuisance=nuisance,
    )
    dropped = []
    for g, label in enumerate(names):
        values, spread = fit.values.copy(), np.zeros(len(fit.values))
        values[weighted.free], spread[weighted.free] = found.values[g], found.shift_sigmas[g]
        known = bool(found.determined[g])
        dropped.append(
            DroppedGroup(
                label=label,
                lines=int(found.n[g]),
                undetermined=tuple(fit.model.names[weighted.free[i]] for i in found.lost[g]),
                values=values,
                shifts=values - fit.values,
                shift_sigmas=spread,
                chi2=float(found.chi2_predictive[g]),
                dof=int(found.dof[g]),
                p=float(chi2_tail(found.chi2_predictive[g], found.dof[g])) if known and found.dof[g] else 1.0,
                error=float(np.sqrt(found.chi2_predicted[g] / found.n[g])),
            )
        )
    return tuple(dropped)


def bootstrap(
    fit: Fit,
    *,
    by: str = "line",
    resamples: int = 1000,
    seed: int,
    progress: Callable[[int, int], None] | None = None,
) -> Bootstrap:
    """Fit resampled data: what the scatter itself says of the error bars.

    By line: as many lines as there are, drawn with replacement within each group of lines (source,
    isotopologue, band). By band: as many bands as there are, drawn with replacement (the lines of a
    band, with whatever they share, stay together). Priors, those of calibration terms included, are
    drawn anew from their own distributions. (B. Efron, Ann. Stat. 7, 1 (1979).)

    Parameters
    ----------
    fit : Fit
    by : "line" or "band"
    resamples : int
    seed : int
        Of `numpy.random.default_rng`.
    progress : callable, optional
        Told ``(done, total)`` now and then.

    Raises
    ------
    UsageError
        For another `by`, fewer than two resamples, or a fit whose parameters are tied to each other.
    CannotDetermine
        If fewer than half of the resamples determine the model.
    """
    if by not in ("line", "band"):
        raise UsageError(f"the bootstrap draws by 'line' or by 'band' (got {by!r})")
    if resamples < 2:
        raise UsageError(f"the bootstrap needs two resamples at least (got {resamples})")
    weighted = weighted_triangles(fit)
    draw = _line_draws(fit, weighted) if by == "line" else _band_draws(fit, weighted)
    rng = np.random.default_rng(seed)
    factor = covariance_factor(weighted.whole.r)
    priors = [_rotated(weighted, item) for item in weighted.priors]
    values, undetermined = [], 0
    for done in range(resamples):
        blocks = [draw(rng), *((share, left + rng.standard_normal(len(left))) for share, left in priors)]
        rows, residuals = (np.concatenate(parts) for parts in zip(*blocks, strict=True))
        triangle = reduce_rows(rows, residuals, np.zeros(rows.shape[1]), n=0)
        # In these coordinates all singular values of the lines as they are equal 1.
        if np.linalg.svd(triangle.r, compute_uv=False)[-1] * _HARDLY < 1:
            undetermined += 1
            continue
        moved = fit.values.copy()
        moved[weighted.free] += factor @ solve(triangle)
        values.append(moved)
        if progress:
            progress(done + 1, resamples)
    if len(values) < _ENOUGH * resamples:
        raise CannotDetermine(
            f"only {len(values)} of {resamples} resamples by {by} determine the model: some of its parameters rest on "
            f"single {by}s. Leave one band out at a time instead, or ask for fewer terms"
        )
    return Bootstrap(by, fit.model.names, np.array(values), undetermined, seed)


def _rotated(weighted: Weighted, triangle: Triangle) -> tuple[np.ndarray, np.ndarray]:
    """Rows of a triangle in orthonormal coordinates, and its residuals (observed less calculated) at the solution."""
    step = solve(weighted.whole) - triangle.base
    return weighted.shares(triangle), triangle.z - triangle.r @ step


def _line_draws(fit: Fit, weighted: Weighted) -> Callable[[np.random.Generator], tuple[np.ndarray, np.ndarray]]:
    """Draws lines within their groups; gives whitened rows in orthonormal coordinates, and residuals.

    Repeats of one transition share a row: the counts of its lines only change its weight and mean.
    """
    lines = weighted_lines(fit, weighted)
    count = len(lines.shares)
    groups = fit.design.group_of
    members = [np.flatnonzero(groups == g) for g in range(len(fit.groups))]

    def draw(rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
        counts = np.empty(len(groups))
        for member in members:
            counts[member] = rng.multinomial(len(member), np.full(len(member), 1 / len(member)))
        total = np.bincount(lines.row_of, counts * lines.root**2, count)
        mean = np.bincount(lines.row_of, counts * lines.root * lines.residuals, count)
        chosen = total > 0
        root = np.sqrt(total[chosen])
        return lines.shares[chosen] * root[:, None], mean[chosen] / root

    return draw


def _band_draws(fit: Fit, weighted: Weighted) -> Callable[[np.random.Generator], tuple[np.ndarray, np.ndarray]]:
    """Draws bands; what it gives is as for lines."""
    labels, names = band_labels(fit)
    rotated = [_rotated(weighted, item) for item in weighted.groups]

    def draw(rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
        counts = rng.multinomial(len(names), np.full(len(names), 1 / len(names)))[labels]
        drawn = [(np.sqrt(n) * rows, np.sqrt(n) * left) for n, (rows, left) in zip(counts, rotated, strict=True) if n]
        rows, left = zip(*drawn, strict=True)
        return np.concatenate(rows), np.concatenate(left)

    return draw
