"""Design rows: from lines and a model to a linear least-squares problem.

Row of a line: derivative of E(upper) - E(lower) + offset + scale * position with respect
to every parameter (conventions: `dunhamfit.molecule.terms`; calibration: observed = true
+ offset + scale * position). The many lines share few levels, so that the powers are
made once for each distinct level, to some 30 digits, and then gathered.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from dunhamfit.algebra.extended import Extended, exact, multiply, powers, two_sum
from dunhamfit.algebra.matrix import Matrix
from dunhamfit.algebra.rows import Rows
from dunhamfit.errors import CannotDetermine
from dunhamfit.fit.model import Model
from dunhamfit.lines.line_list import LineList


@dataclass(frozen=True, eq=False)
class Groups:
    """The groups of a fit: the used lines of one source, isotopologue and band each.

    Attributes
    ----------
    source, isotopologue, v_upper, v_lower, lines : ndarray of int, shape (groups,)
        Codes as in the LineList, and the number of used lines.
    """

    source: np.ndarray
    isotopologue: np.ndarray
    v_upper: np.ndarray
    v_lower: np.ndarray
    lines: np.ndarray

    def __len__(self) -> int:
        return len(self.source)


@dataclass(frozen=True, eq=False)
class Design:
    """Rows of a model for the used lines.

    Attributes
    ----------
    rows : Rows
        One row for each distinct transition of a group; the priors are the last group, if there are any.
    groups : Groups
        Of the lines only.
    used : ndarray of int, shape (n_used,)
        Indices of the used lines.
    group_of, row_of : ndarray of int, shape (n_used,)
        Group and row of each used line.
    """

    rows: Rows
    groups: Groups
    used: np.ndarray
    group_of: np.ndarray
    row_of: np.ndarray


def build_design(model: Model, lines: LineList, line_weights: np.ndarray | None = None) -> Design:
    """Rows of `model` for the used lines of `lines`, and for its priors.

    Parameters
    ----------
    model : Model
    lines : LineList
    line_weights : ndarray of float, shape (n_lines,), optional
        Weights of a robust fit, by which 1 / sigma^2 of each line is multiplied.

    Raises
    ------
    CannotDetermine
        If no line is used.
    """
    used = np.flatnonzero(lines.used)
    if not len(used):
        raise CannotDetermine("no line is used: every line is excluded, or the list is empty")
    order, firsts, row_of = _pool(lines, used)
    leading = used[order[firsts]]
    groups, starts = _group(lines, leading, np.diff(firsts, append=len(used)))
    group_of = np.repeat(np.arange(len(groups)), np.diff(starts))[row_of]
    weights = 1.0 / lines.sigma[used] ** 2
    if line_weights is not None:
        weights = weights * line_weights[used]
    observed, scale, spread = _pooled(lines.position[used], weights, order, firsts, row_of)
    count = len(groups)
    rows = Rows(
        matrix=_matrix(model, lines, leading, observed.high),
        observed=observed,
        scale=scale,
        starts=starts,
        lines=groups.lines,
        spread=np.bincount(group_of, spread, count) if spread is not None else np.zeros(count),
        log_sigma=np.bincount(group_of, -0.5 * np.log(weights), count),
    )
    return Design(_with_priors(model, rows), groups, used, group_of, row_of)


def calculate(model: Model, lines: LineList, values: np.ndarray) -> Extended:
    """Calculated positions of all lines, calibration terms included, in cm-1 to some 30 digits.

    Parameters
    ----------
    model : Model
    lines : LineList
    values : ndarray of float, shape (p,)

    Returns
    -------
    Extended, shape (n_lines,)
        NaN for lines of isotopologues that the model does not know; such lines are never used.
    """
    known = np.array([model.knows(name) for name in lines.isotopologues], dtype=bool)[lines.isotopologue]
    if not known.all():
        total = Extended(np.full(len(lines), np.nan), np.zeros(len(lines)))
        if known.any():
            part = calculate(model, lines.subset(known), values)
            total.high[known], total.low[known] = part.high, part.low
        return total
    return _matrix(model, lines, np.arange(len(lines)), lines.position).transposed_product(values)


def level_columns(model: Model, isotopologues, code, v, j) -> Extended:
    """Derivative of each level's energy with respect to every constant.

    Parameters
    ----------
    model : Model
    isotopologues : sequence of str
        Names that `code` indexes.
    code, v, j : ndarray of int, shape (levels,)

    Returns
    -------
    Extended, shape (constants, levels)
    """
    constants = model.constants
    k = np.array([item.k for item in constants])
    l = np.array([item.l for item in constants])
    # v + 1/2 and J(J + 1) are exact, and so are their powers up to 106 bits: one table serves both.
    count = int(v.max()) + 1
    base = np.concatenate([np.arange(count) + 0.5, np.arange(j.max() + 1) * np.arange(1.0, j.max() + 2)])
    power = powers(exact(base), int(max(k.max(), l.max())))
    product = multiply(power.take(k, axis=0).take(v), power.take(l, axis=0).take(count + j))
    present = np.flatnonzero(np.bincount(code, minlength=len(isotopologues)))
    factors = np.zeros((len(constants), 2, len(isotopologues)))
    for index in present:
        factors[:, :, index] = model.mass_factors(isotopologues[index])
    if np.all(factors[:, :, present] == [[1.0], [0.0]]):
        return product
    factors = factors[:, :, code]
    return multiply(product, Extended(factors[:, 0], factors[:, 1]))


def _pool(lines: LineList, used: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Order of the used lines by group and transition, where each transition starts, row of each line."""
    v_upper, v_lower = lines.v_upper[used], lines.v_lower[used]
    j_upper, j_lower = lines.j_upper[used], lines.j_lower[used]
    v_width = int(max(v_upper.max(), v_lower.max())) + 1
    j_width = int(max(j_upper.max(), j_lower.max())) + 1
    key = lines.source[used].astype(np.int64) * len(lines.isotopologues) + lines.isotopologue[used]
    for column, width in ((v_upper, v_width), (v_lower, v_width), (j_upper, j_width), (j_lower, j_width)):
        key *= width
        key += column
    order = np.argsort(key)  # not stable, but several times faster: which repeat comes first does not matter
    new = _changes(key[order])
    row_of = np.empty(len(order), dtype=np.int64)
    row_of[order] = np.cumsum(new) - 1
    return order, np.flatnonzero(new), row_of


def _group(lines: LineList, leading: np.ndarray, repeats: np.ndarray) -> tuple[Groups, np.ndarray]:
    """Groups of the rows, which are in the order of groups, and where they start and end.

    Parameters
    ----------
    leading : ndarray of int, shape (rows,)
        One line of each row.
    repeats : ndarray of int, shape (rows,)
        Number of lines of each row.
    """
    columns = tuple(item[leading] for item in (lines.source, lines.isotopologue, lines.v_upper, lines.v_lower))
    firsts = np.flatnonzero(_changes(*columns))
    groups = Groups(*(item[firsts] for item in columns), lines=np.add.reduceat(repeats, firsts))
    return groups, np.append(firsts, len(leading))


def _changes(*columns: np.ndarray) -> np.ndarray:
    """Mask of the entries that differ from the one before in any column; the first one always does."""
    new = np.zeros(len(columns[0]), dtype=bool)
    new[:1] = True
    for column in columns:
        new[1:] |= column[1:] != column[:-1]
    return new


def _pooled(position, weights, order, firsts, row_of) -> tuple[Extended, np.ndarray, np.ndarray | None]:
    """Weighted mean, 1 / sigma and within sum of squares (by line) of repeats.

    Means are taken of differences from one of the repeats: the whole positions would lose
    what repeats have gained.
    """
    if len(firsts) == len(order):
        return exact(position[order]), np.sqrt(weights[order]), None
    first = position[order[firsts]]
    total = np.bincount(row_of, weights)
    from_first = position - first[row_of]
    mean = np.bincount(row_of, weights * from_first) / total
    spread = weights * (from_first - mean[row_of]) ** 2
    return two_sum(first, mean), np.sqrt(total), spread


def _levels(lines: LineList, chosen: np.ndarray):
    """Distinct levels (isotopologue code, v, J) of the chosen lines, and the upper and lower level of each."""
    j_upper, j_lower = lines.j_upper[chosen], lines.j_lower[chosen]
    v_upper, v_lower = lines.v_upper[chosen], lines.v_lower[chosen]
    j_width = int(max(j_upper.max(), j_lower.max())) + 1
    v_width = int(max(v_upper.max(), v_lower.max())) + 1
    code = lines.isotopologue[chosen].astype(np.int64) * v_width
    keys = np.concatenate([(code + v_upper) * j_width + j_upper, (code + v_lower) * j_width + j_lower])
    distinct, number = _renumber(keys)
    rest, j = np.divmod(distinct, j_width)
    code, v = np.divmod(rest, v_width)
    return (code, v, j), number[: len(chosen)], number[len(chosen) :]


def _renumber(key: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Distinct keys in ascending order, and the number of each entry among them.

    A table over the range of keys where that is short, which is much faster than sorting.
    """
    span = int(key.max()) + 1
    if span > 4 * len(key) + 1_000_000:
        return np.unique(key, return_inverse=True)
    present = np.zeros(span, dtype=bool)
    present[key] = True
    return np.flatnonzero(present), (np.cumsum(present) - 1)[key]


def _matrix(model: Model, lines: LineList, leading: np.ndarray, observed: np.ndarray) -> Matrix:
    """Design columns of the lines `leading`, shape (p, rows)."""
    levels, upper, lower = _levels(lines, leading)
    calibration = model.parameters[len(model.constants) :]
    own = np.empty((len(calibration), len(leading)))
    # The scale multiplies the observed position: the difference from the true one is of second order.
    for index, parameter in enumerate(calibration):
        own[index] = _calibration_column(parameter, lines, leading, observed)
    return Matrix.of_levels(level_columns(model, lines.isotopologues, *levels), upper, lower, own)


def _calibration_column(parameter, lines: LineList, chosen, position: np.ndarray) -> np.ndarray:
    code = next(i for i, source in enumerate(lines.sources) if source.name == parameter.source)
    of_source = (lines.source[chosen] == code).astype(float)
    return of_source if parameter.kind == "offset" else of_source * position


def _with_priors(model: Model, rows: Rows) -> Rows:
    priors = [(i, model.prior(item)) for i, item in enumerate(model.parameters)]
    priors = [(i, prior) for i, prior in priors if prior is not None and prior.sigma > 0]
    if not priors:
        return rows
    extra = np.zeros((rows.parameters, len(priors)))
    extra[[i for i, _ in priors], np.arange(len(priors))] = 1.0
    value = np.array([prior.value for _, prior in priors])
    sigma = np.array([prior.sigma for _, prior in priors])
    return Rows(
        matrix=rows.matrix.with_lines(extra),
        observed=Extended(
            np.concatenate([rows.observed.high, value]),
            np.concatenate([rows.observed.low, np.zeros_like(value)]),
        ),
        scale=np.concatenate([rows.scale, 1.0 / sigma]),
        starts=np.append(rows.starts, rows.starts[-1] + len(priors)),
        lines=np.append(rows.lines, len(priors)),
        spread=np.append(rows.spread, 0.0),
        log_sigma=np.append(rows.log_sigma, np.log(sigma).sum()),
    )
