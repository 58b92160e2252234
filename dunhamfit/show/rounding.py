"""Constants rounded for print, so that lines recomputed from the printed numbers hardly move.

Two digits of sigma are not always enough: constants are strongly correlated, and the rounding of
each is not. The guard recomputes the lines, and gives another digit to the constant that moves
the worst line most, until no line moves by a tenth of its sigma.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from dunhamfit.errors import UsageError
from dunhamfit.fit.record import Fit
from dunhamfit.show.numbers import format_number, format_value, parse_value_sigma

# Largest move of a line that rounding may cause, in units of its sigma.
LARGEST_SHIFT = 0.1
DIGITS = 2
# Decimals of a number near 1 that a double holds.
_MOST_DECIMALS = 15


@dataclass(frozen=True, eq=False)
class RoundedConstants:
    """Constants as they are printed.

    Attributes
    ----------
    texts : tuple of str
        value(sigma) of each constant.
    values : ndarray of float, shape (constants,)
        What the texts read back as.
    digits : tuple of int
        Digits of sigma printed; 0 for a fixed constant, whose value is printed in full.
    largest_shift : float
        Largest move of a used line, recomputed from the printed numbers, in units of its sigma: the
        stated one, or that with the noise factor where it is smaller. A bound from the triangles of
        the groups where the lines would have to be read from an archive first.
    added : tuple of str
        Names of constants that have more than two digits of sigma.
    """

    texts: tuple[str, ...]
    values: np.ndarray
    digits: tuple[int, ...]
    largest_shift: float
    added: tuple[str, ...]

    @property
    def note(self) -> str:
        """What the table says of its rounding."""
        moves = f"Lines recomputed from the printed numbers move by less than {_up(self.largest_shift)} of their sigma"
        if not self.added:
            return f"{moves}."
        return f"{moves}; for this {', '.join(self.added)} have more than {DIGITS} digits of sigma."


@dataclass(frozen=True, eq=False)
class RoundedCorrelation:
    """A correlation matrix that is still positive definite as printed.

    Attributes
    ----------
    names : tuple of str
        Constants that are not fixed.
    matrix : ndarray of float, shape (names, names)
    decimals : int
    note : str
        Says if more decimals than asked for were needed, and how well lines are predicted from it.
    """

    names: tuple[str, ...]
    matrix: np.ndarray
    decimals: int
    note: str


def rounded_constants(fit: Fit) -> RoundedConstants:
    """Round the constants of a fit to two digits of sigma, or to as many as its lines need.

    Parameters
    ----------
    fit : Fit

    Returns
    -------
    RoundedConstants
    """
    count = len(fit.constants)
    values, sigmas = fit.values[:count], fit.sigmas[:count]
    digits = [DIGITS if sigma > 0 else 0 for sigma in sigmas]
    texts = [format_value(v, s, digits=d or DIGITS) for v, s, d in zip(values, sigmas, digits, strict=True)]
    moved = np.array([parse_value_sigma(text)[0] for text in texts]) - values
    rows, starts = (_line_rows(fit), None) if lines_at_hand(fit) else _group_rows(fit)
    row_moves = rows @ moved
    # Digits end where a double does: a constant that reads back unchanged moves nothing.
    while np.max(shifts := _shifts(row_moves, starts), initial=0.0) >= LARGEST_SHIFT and np.any(moved):
        parts = _sizes(rows, starts, int(np.argmax(shifts))) * np.abs(moved)
        worst = int(np.argmax(parts))
        # A digit divides the part by ten: as many at once as this constant alone needs.
        digits[worst] += max(1, int(np.log10(parts[worst] / LARGEST_SHIFT)))
        texts[worst] = format_value(values[worst], sigmas[worst], digits=digits[worst])
        before, moved[worst] = moved[worst], parse_value_sigma(texts[worst])[0] - values[worst]
        row_moves += rows[:, worst] * (moved[worst] - before)
    return RoundedConstants(
        texts=tuple(texts),
        values=values + moved,
        digits=tuple(digits),
        largest_shift=float(np.max(shifts, initial=0.0)),
        added=tuple(item.name for item, d in zip(fit.constants, digits, strict=True) if d > DIGITS),
    )


def rounded_correlation(fit: Fit, decimals: int = 3) -> RoundedCorrelation:
    """Round the correlation matrix of the constants; decimals are added until it is positive definite.

    Parameters
    ----------
    fit : Fit
    decimals : int
        Asked for.

    Raises
    ------
    UsageError
        For a number of decimals outside 1 to 15, a fit in which all constants are fixed, or constants so
        strongly correlated that no 15 decimals hold their matrix.
    """
    if not 1 <= decimals <= _MOST_DECIMALS:
        raise UsageError(f"a correlation matrix has 1 to {_MOST_DECIMALS} decimals (got {decimals})")
    count = len(fit.constants)
    free = np.flatnonzero(fit.sigmas[:count] > 0)
    if not len(free):
        raise UsageError("every constant of this fit is fixed: there is no correlation matrix")
    unit = fit.factor[free] / fit.sigmas[free, None]
    exact = unit @ unit.T
    used = decimals
    while not _positive_definite(rounded := _rounded(exact, used)):
        used += 1
        if used > _MOST_DECIMALS:
            raise UsageError(
                f"no correlation matrix of up to {_MOST_DECIMALS} decimals is positive definite for this fit: its "
                "constants are too strongly correlated. Give the covariance at full precision instead"
            )
    note = f"Rounded to {used} decimals."
    if used > decimals:
        note = f"Rounded to {used} decimals: with {decimals} the matrix would not be positive definite."
    note += f" Uncertainties of calculated lines recomputed from it are off by up to {_loss(fit, free, rounded)} %."
    return RoundedCorrelation(tuple(fit.constants[i].name for i in free), rounded, used, note)


def _line_rows(fit: Fit) -> np.ndarray:
    """Change of each used transition, over the smallest sigma of its lines, with each constant, (rows, constants)."""
    design, count = fit.design, len(fit.constants)
    rows = int(design.rows.starts[len(fit.groups)])
    sigma = np.full(rows, np.inf)
    factor = np.minimum(fit.noise.by_group, 1.0)[design.group_of]
    np.minimum.at(sigma, design.row_of, fit.lines.sigma[design.used] * factor)
    return design.rows.whitened[:rows, :count] / (design.rows.scale[:rows] * sigma)[:, None]


def lines_at_hand(fit: Fit) -> bool:
    """Whether the lines of the fit are in memory, not only in an archive that would have to be read."""
    return "position" in vars(fit.lines)


def _group_rows(fit: Fit) -> tuple[np.ndarray, np.ndarray]:
    """Triangles of the groups in the place of their lines, and the first row of each group.

    |R_g x| is the root of the sum of squares over the lines of the group, so that none of them moves by more.
    """
    factors = np.minimum(fit.noise.by_group, 1.0)
    blocks = [item.r[:, : len(fit.constants)] / f for item, f in zip(fit.triangles, factors, strict=False)]
    return np.concatenate(blocks), np.cumsum([0, *(len(block) for block in blocks[:-1])])


def _shifts(row_moves: np.ndarray, starts: np.ndarray | None) -> np.ndarray:
    """Move of each line, or a bound for the lines of each group."""
    return np.abs(row_moves) if starts is None else np.sqrt(np.add.reduceat(row_moves**2, starts))


def _sizes(rows: np.ndarray, starts: np.ndarray | None, place: int) -> np.ndarray:
    """How much each constant moves a line or group, shape (constants,)."""
    if starts is None:
        return np.abs(rows[place])
    block = rows[starts[place] : starts[place + 1] if place + 1 < len(starts) else None]
    return np.sqrt((block**2).sum(axis=0))


def _rounded(matrix: np.ndarray, decimals: int) -> np.ndarray:
    rounded = np.round(matrix, decimals)
    np.fill_diagonal(rounded, 1.0)
    return (rounded + rounded.T) / 2


def _positive_definite(matrix: np.ndarray) -> bool:
    """Whether the smallest eigenvalue stands clear of the rounding of a double."""
    return float(np.linalg.eigvalsh(matrix)[0]) > len(matrix) * np.finfo(float).eps


def _loss(fit: Fit, free: np.ndarray, rounded: np.ndarray) -> str:
    """Largest relative error, in percent, of a line's sigma from the rounded correlations."""
    rows = _line_rows(fit)[:, free] * fit.sigmas[free]
    exact = ((rows @ (fit.factor[free] / fit.sigmas[free, None])) ** 2).sum(axis=1)
    printed = np.einsum("ij,jk,ik->i", rows, rounded, rows, optimize=True)
    off = float(np.max(np.abs(np.sqrt(np.maximum(printed, 0.0) / exact) - 1)))
    return format_number(100 * off, digits=2)


def _up(shift: float) -> str:
    """Two decimals, rounded up: "less than" stays true."""
    return f"{np.floor(shift * 100 + 1) / 100:.2f}"
