"""Which terms: every smaller set of terms from the triangles of one wide fit, at p x p work each.

The wide fit holds every term that the lines can determine. With its triangles in hand, a
smaller set is the same problem with the columns of the left-out terms fixed at zero, so that
chi2, error bars and the error of predicting a band that was left out cost no pass over the
lines. Noise factors are those of the wide fit, so that all sets are judged by the same weights.

Prediction of a left-out band: with e_g the whitened residuals of band g at the solution and
H_g its leverage matrix, the residuals of the fit without the band are (I - H_g)^-1 e_g
(the identity behind the PRESS statistic: D. M. Allen, Technometrics 16, 125 (1974)).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import qr, solve_triangular

from dunhamfit.algebra.criteria import aicc, bic, reduced_chi2
from dunhamfit.algebra.triangle import Triangle, merge
from dunhamfit.errors import CannotDetermine
from dunhamfit.fit.record import Fit
from dunhamfit.molecule.terms import Term, TermSet

# A top term with |value| below this many sigma is not worth a parameter.
LEAST_T = 2.0
# Sets within this BIC of the best are near-equal: beyond it the evidence is "very strong"
# (R. E. Kass and A. E. Raftery, J. Am. Stat. Assoc. 90, 773 (1995)).
NEAR_BIC = 10.0
# Eigenvalue of I - H_g below which the rest of the bands cannot predict band g.
_ALONE = 1e-9


@dataclass(frozen=True, eq=False)
class Candidate:
    """One set of terms and how it does.

    Attributes
    ----------
    terms : TermSet
    columns : ndarray of int
        Places of its parameters in the wide fit.
    values, sigmas : ndarray of float, shape (columns,)
    chi2, reduced_chi2, aicc, bic : float
        With the noise factors of the wide fit.
    left_out_error : float
        Root mean square of the whitened errors of predicting each band from all others; infinite where
        a band that the other sets can predict is needed to determine the set.
    left_out : ndarray of float, shape (bands,)
        Its sum of squares by band, in the order of `Selection.bands`; infinite where not determined.
    smallest_t : float
        Smallest |value| / sigma of the terms that end a column of the staircase.
    condition : float
    """

    terms: TermSet
    columns: np.ndarray
    values: np.ndarray
    sigmas: np.ndarray
    chi2: float
    reduced_chi2: float
    aicc: float
    bic: float
    left_out_error: float
    left_out: np.ndarray
    smallest_t: float
    condition: float

    @property
    def parameters(self) -> int:
        return len(self.columns)


@dataclass(frozen=True, eq=False)
class Selection:
    """Candidate sets of terms, and which one is recommended.

    Attributes
    ----------
    wide : Fit
        The fit with every term that was considered.
    candidates : tuple of Candidate
        By ascending number of parameters.
    recommended : Candidate
    near_equal : tuple of Candidate
        Sets that the lines hardly tell from the recommended one, itself included.
    weights : ndarray of float, shape (near_equal,)
        Share of each near-equal set, from its left-out error.
    bands : tuple of str
        Bands that were left out one at a time.
    reason : str
    """

    wide: Fit
    candidates: tuple[Candidate, ...]
    recommended: Candidate
    near_equal: tuple[Candidate, ...]
    weights: np.ndarray
    bands: tuple[str, ...]
    reason: str

    def model_spread(self, rows: np.ndarray) -> np.ndarray:
        """Standard deviation of predictions over the near-equal sets, cm-1.

        Parameters
        ----------
        rows : ndarray of float, shape (lines, p)
            Derivatives with respect to the parameters of the wide fit.

        Returns
        -------
        ndarray of float, shape (lines,)
        """
        changes = np.zeros((len(self.near_equal), rows.shape[1]))
        for change, candidate in zip(changes, self.near_equal, strict=True):
            change[candidate.columns] = candidate.values
        changes -= self.wide.values
        predicted = changes @ rows.T
        mean = self.weights @ predicted
        return np.sqrt(self.weights @ (predicted - mean) ** 2)


def select_terms(wide: Fit) -> Selection:
    """Compare the sets of terms inside a wide fit, one term at a time along the staircase.

    Forward from the smallest set, backward from the widest; every set that a step
    looked at is a candidate.

    Parameters
    ----------
    wide : Fit
        With the widest set to be considered, such as `dunhamfit.inference.widest.widest_fit` makes.

    Raises
    ------
    CannotDetermine
        If no set of terms can be told from the lines.
    """
    board = _Board(wide)
    smallest = TermSet(
        [term for term in wide.model.terms if (term.k, term.l) in ((1, 0), (0, 1))] or wide.model.terms[:1]
    )
    forward = _climb(board, smallest, _larger)
    for start in (forward, wide.model.terms):
        settled = _climb(board, start, _smaller)
        _climb(board, settled, _larger)
    candidates = [item for item in board.seen.values() if item is not None]
    if not candidates:
        raise CannotDetermine("no set of terms can be told from the lines; add bands")
    lowest = min(item.bic for item in candidates)
    near = sorted((item for item in candidates if item.bic <= lowest + NEAR_BIC), key=lambda item: item.bic)
    best = min(near, key=lambda item: (item.smallest_t < LEAST_T, item.left_out_error, item.bic))
    return Selection(
        wide=wide,
        candidates=tuple(sorted(candidates, key=lambda item: (item.parameters, item.bic))),
        recommended=best,
        near_equal=tuple(near),
        weights=_weights(near),
        bands=board.bands,
        reason=_reason(best, near, len(candidates)),
    )


def _reason(best: Candidate, near: list[Candidate], count: int) -> str:
    return (
        f"of {count} sets, {len(near)} lie within {NEAR_BIC:g} of the lowest BIC; of these, with last terms at least "
        f"{LEAST_T:g} sigma from zero, this one predicts left-out bands best ({best.left_out_error:.3g} of their sigma)"
    )


def _weights(near: list[Candidate]) -> np.ndarray:
    """Shares proportional to exp(-half the excess left-out chi2 of the bands that all can predict)."""
    left_out = np.stack([item.left_out for item in near])
    common = np.isfinite(left_out).all(axis=0)
    excess = left_out[:, common].sum(axis=1)
    shares = np.exp(-0.5 * np.minimum(excess - excess.min(), 1400.0))
    return shares / shares.sum()


def _climb(board: _Board, start: TermSet, neighbours) -> TermSet:
    """Move to the neighbour of lowest BIC as long as one is lower."""
    here = start
    while True:
        steps = [
            (item.bic, terms) for terms in neighbours(here, board.wide.model.terms) if (item := board.judge(terms))
        ]
        now = board.judge(here)
        if not steps or (now is not None and min(steps, key=lambda s: s[0])[0] >= now.bic):
            return here
        here = min(steps, key=lambda s: s[0])[1]


def _larger(terms: TermSet, widest: TermSet):
    """Sets with one more term: the next k of some l, or the first of the next l."""
    orders = dict(enumerate(terms.orders))
    for l in range(len(orders) + 1):
        k = orders.get(l, -1) + 1
        k = max(k, 1) if l == 0 else k
        if Term(k, l) in widest and (l == 0 or k <= orders.get(l - 1, -1)):
            yield TermSet([*terms, Term(k, l)])


def _smaller(terms: TermSet, widest: TermSet):
    """Sets with one term less: the last k of some l that no higher l needs."""
    orders = dict(enumerate(terms.orders))
    for l, k in orders.items():
        if Term(k, l) in terms and orders.get(l + 1, -1) < k and len(terms) > 1:
            yield TermSet(term for term in terms if term != Term(k, l))


class _Board:
    """The wide fit in orthonormal coordinates, and the candidates judged so far."""

    def __init__(self, wide: Fit):
        self.wide = wide
        count = len(wide.groups)
        scaled = [t.scaled(f) for t, f in zip(wide.triangles[:count], wide.noise.by_group, strict=True)]
        whole = merge([*scaled, *wide.triangles[count:]])
        free = np.flatnonzero(~wide.model.fixed)
        self.free = free
        self.r, self.z, self.rss, self.n = whole.r[:, free], whole.z, whole.rss, whole.n
        self.base = wide.values
        self.log_sigma = whole.log_sigma
        self.bands, labels = _bands(wide)
        groups = [merge([t for t, of in zip(scaled, labels, strict=True) if of == b]) for b in range(len(self.bands))]
        self.stack = _Groups(groups, self.r, free)
        self.seen: dict[TermSet, Candidate | None] = {}
        self.always = [i for i in free if wide.model.parameters[i].kind != "term"]

    def judge(self, terms: TermSet) -> Candidate | None:
        """The candidate, or None where the lines cannot determine it."""
        if terms not in self.seen:
            self.seen[terms] = self._judge(terms)
        return self.seen[terms]

    def _judge(self, terms: TermSet) -> Candidate | None:
        parameters = self.wide.model.parameters
        chosen = [
            i for i in self.free if parameters[i].kind != "term" or Term(parameters[i].k, parameters[i].l) in terms
        ]
        kept = np.isin(self.free, chosen)
        columns = self.free[kept]
        offset = self.r[:, ~kept] @ self.base[self.free[~kept]]
        basis, r = qr(self.r[:, kept], mode="economic", check_finite=False)
        norms = np.sqrt((r**2).sum(axis=0))
        singular = np.linalg.svd(r / norms, compute_uv=False)
        if singular[-1] < 1e-13 * singular[0]:
            return None
        inward = basis.T @ (self.z + offset)
        rest = self.z + offset - basis @ inward
        inverse = solve_triangular(r, np.eye(len(r)), check_finite=False)
        values = self.base[columns] + inverse @ inward
        sigmas = np.sqrt((inverse**2).sum(axis=1))
        chi2 = self.rss + float(rest @ rest)
        left_out = self.stack.left_out(basis, basis @ inward - offset)
        told = self.stack.lines[np.isfinite(left_out)].sum()
        error = np.sqrt(left_out[np.isfinite(left_out)].sum() / told) if told else np.inf
        tops = [i for i, c in enumerate(columns) if _ends_column(parameters[c], terms)]
        counted = len(columns) + len(self.wide.noise.factors)
        likelihood = -0.5 * (chi2 + self.n * np.log(2 * np.pi)) - self.log_sigma
        return Candidate(
            terms=terms,
            columns=columns,
            values=values,
            sigmas=sigmas,
            chi2=chi2,
            reduced_chi2=reduced_chi2(chi2, self.n - len(columns)),
            aicc=aicc(likelihood, self.n, counted),
            bic=bic(likelihood, self.n, counted),
            left_out_error=float(error),
            left_out=left_out,
            smallest_t=min((abs(values[i]) / sigmas[i] for i in tops), default=np.inf),
            condition=float(singular[0] / singular[-1]),
        )


def _ends_column(parameter, terms: TermSet) -> bool:
    return parameter.kind == "term" and Term(parameter.k + 1, parameter.l) not in terms


def _bands(wide: Fit) -> tuple[tuple[str, ...], np.ndarray]:
    """Bands of one isotopologue from all sources, and the band of each group."""
    groups = wide.groups
    keys = np.stack([groups.isotopologue, groups.v_upper, groups.v_lower])
    bands, label = np.unique(keys, axis=1, return_inverse=True)
    names = tuple(f"{wide.lines.isotopologues[code]} {upper}-{lower}" for code, upper, lower in bands.T)
    return names, label


class _Groups:
    """Bands in the orthonormal coordinates of the wide fit, each reduced to its own rank."""

    def __init__(self, triangles: list[Triangle], r: np.ndarray, free: np.ndarray):
        width = r.shape[1]
        shares, residuals, self.rss = [], [], []
        for item in triangles:
            share = solve_triangular(r, item.r[:, free].T, trans=1, check_finite=False).T
            rotation, reduced, pivots = qr(share, mode="full", pivoting=True, check_finite=False)
            size = np.abs(np.diag(reduced))
            rank = max(int(np.sum(size > 1e-11)), 1)
            rotated = rotation.T @ item.z
            compact = np.zeros((rank, width))
            compact[:, pivots] = reduced[:rank]
            shares.append(compact)
            residuals.append(rotated[:rank])
            self.rss.append(item.rss + float(rotated[rank:] @ rotated[rank:]))
        tallest = max(len(item) for item in shares)
        self.shares = np.zeros((len(shares), tallest, width))
        self.z = np.zeros((len(shares), tallest))
        for index, (share, residual) in enumerate(zip(shares, residuals, strict=True)):
            self.shares[index, : len(share)] = share
            self.z[index, : len(residual)] = residual
        self.lines = np.array([item.n for item in triangles])
        self.rss = np.array(self.rss)

    def left_out(self, basis: np.ndarray, solution: np.ndarray) -> np.ndarray:
        """Sum of squared whitened errors of predicting each band from the others, shape (bands,).

        Parameters
        ----------
        basis : ndarray of float, shape (p wide, p)
            Orthonormal basis of the candidate's columns.
        solution : ndarray of float, shape (p wide,)
            R (c - base) of the candidate.
        """
        residual = self.shares @ solution - self.z
        own = self.shares @ basis
        rest = np.eye(own.shape[1]) - own @ own.transpose(0, 2, 1)
        eigenvalues, vectors = np.linalg.eigh(rest)
        turned = np.einsum("gij,gi->gj", vectors, residual)
        alone = eigenvalues[:, 0] < _ALONE
        predicted = turned / np.where(alone[:, None], 1.0, eigenvalues)
        return np.where(alone, np.inf, (predicted**2).sum(axis=1) + self.rss)
