"""One set of terms judged from the triangles of a wide fit, at p x p work each.

A smaller set is the wide problem with the columns of the left-out terms fixed at zero, so that
chi2, error bars and the prediction of a band that was left out cost no pass over the lines.

With S_g = R_g R^-1 the rows of band g in the orthonormal coordinates of the wide fit, Q the basis of
the candidate's columns in them and e_g the residuals of the band at the candidate's solution, the
other bands predict band g with the residuals (I - H_g)^-1 e_g and the covariance (I - H_g)^-1, where
H_g = S_g Q Q^T S_g^T (the identity behind the PRESS statistic: D. M. Allen, Technometrics 16, 125
(1974)). Their log predictive density, -1/2 [e_g^T (I - H_g)^-1 e_g - ln det(I - H_g)] and a part that is
the same for all candidates, is what left-out data say of a model
(A. Vehtari, A. Gelman and J. Gabry, Stat. Comput. 27, 1413 (2017)).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import qr

from dunhamfit.algebra.criteria import aicc, bic, log_likelihood, reduced_chi2
from dunhamfit.algebra.triangle import Triangle, covariance_factor, merge, reduce_rows
from dunhamfit.fit.record import Fit
from dunhamfit.inference.resample import band_labels
from dunhamfit.molecule.terms import TermSet

# Smallest pivot of I - H_g below which the rest of the bands cannot predict band g.
_ALONE = 1e-9


@dataclass(frozen=True, eq=False)
class Candidate:
    """One set of terms and how it does.

    Attributes
    ----------
    terms : TermSet
    columns : ndarray of int
        Places of its free parameters in the wide fit.
    values, sigmas : ndarray of float, shape (columns,)
    chi2, reduced_chi2, aicc, bic : float
        With the noise factors of the wide fit.
    left_out : ndarray of float, shape (bands,)
        Sum of squares of the whitened errors of predicting each band from all others; infinite where a
        band is needed to determine the set.
    log_predictive : ndarray of float, shape (bands,)
        Log predictive density of each left-out band, up to a part that all candidates share.
    left_out_error : float
        Root mean square of the whitened errors over the bands that can be predicted.
    smallest_t : float
        Smallest |value| / sigma of the terms that end a column of the staircase.
    condition : float
        Of the design with columns of unit norm.
    """

    terms: TermSet
    columns: np.ndarray
    values: np.ndarray
    sigmas: np.ndarray
    chi2: float
    reduced_chi2: float
    aicc: float
    bic: float
    left_out: np.ndarray
    log_predictive: np.ndarray
    left_out_error: float
    smallest_t: float
    condition: float

    @property
    def parameters(self) -> int:
        return len(self.columns)


class Board:
    """The wide fit in orthonormal coordinates, in which candidates are judged."""

    def __init__(self, wide: Fit):
        self.wide = wide
        count = len(wide.groups)
        scaled = [t.scaled(f) for t, f in zip(wide.triangles[:count], wide.noise.by_group, strict=True)]
        self.free = np.flatnonzero(~wide.model.fixed)
        labels, self.bands = band_labels(wide)
        groups = [merge([t for t, of in zip(scaled, labels, strict=True) if of == b]) for b in range(len(self.bands))]
        items = [*groups, *wide.triangles[count:]]
        residual = np.concatenate([item.z for item in items])
        shares, self.r = _orthonormal(np.concatenate([item.r[:, self.free] for item in items]))
        self.z = shares.T @ residual
        outside = residual - shares @ self.z
        self.rss = float(sum(item.rss for item in items) + outside @ outside)
        self.n = sum(item.n for item in items)
        self.log_sigma = float(sum(item.log_sigma for item in items))
        self.base = wide.values[self.free]
        self._stack = _Bands(groups, shares)
        parameters = [wide.model.parameters[i] for i in self.free]
        self._kind = [item.kind for item in parameters]
        self._pair = [None if item.source else (item.k, item.l) for item in parameters]

    def judge(self, terms: TermSet) -> Candidate:
        """The candidate with these terms, a subset of those of the wide fit."""
        inside = {(term.k, term.l) for term in terms}
        kept = np.array([pair is None or pair in inside for pair in self._pair])
        # Left-out columns are fixed at zero: residuals about the wide solution, then those of the candidate.
        target = self.z + self.r[:, ~kept] @ self.base[~kept]
        basis, r = np.linalg.qr(self.r[:, kept])
        inward = basis.T @ target
        rest = target - basis @ inward
        inverse = covariance_factor(r)
        values = self.base[kept] + inverse @ inward
        sigmas = np.sqrt(np.einsum("ij,ij->i", inverse, inverse))
        chi2 = self.rss + float(rest @ rest)
        left_out, predictive = self._stack.left_out(basis, self.z - rest)
        told = np.isfinite(left_out)
        lines = int(self._stack.lines[told].sum())
        singular = np.linalg.svd(r / np.sqrt(np.einsum("ij,ij->j", r, r)), compute_uv=False)
        counted = len(values) + len(self.wide.noise.factors)
        likelihood = log_likelihood(chi2, self.n, self.log_sigma)
        return Candidate(
            terms=terms,
            columns=self.free[kept],
            values=values,
            sigmas=sigmas,
            chi2=chi2,
            reduced_chi2=reduced_chi2(chi2, self.n - len(values)),
            aicc=aicc(likelihood, self.n, counted),
            bic=bic(likelihood, self.n, counted),
            left_out=left_out,
            log_predictive=predictive,
            left_out_error=float(np.sqrt(left_out[told].sum() / lines)) if lines else np.inf,
            smallest_t=self._smallest_t(inside, kept, np.abs(values) / sigmas),
            condition=float(singular[0] / singular[-1]),
        )

    def _smallest_t(self, inside: set[tuple[int, int]], kept: np.ndarray, t: np.ndarray) -> float:
        tops = [
            size
            for place, size in zip(np.flatnonzero(kept).tolist(), t.tolist(), strict=True)
            if self._kind[place] == "term" and (self._pair[place][0] + 1, self._pair[place][1]) not in inside
        ]
        return min(tops, default=np.inf)


def _orthonormal(rows: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Q and R of the rows. The second round makes Q orthonormal to eps, however ill-conditioned R is."""
    factor, total = rows, np.eye(rows.shape[1])
    for _ in range(2):
        r = reduce_rows(factor, np.zeros(len(rows)), np.zeros(len(total)), n=0).r
        inverse = covariance_factor(r)
        # In pieces that no BLAS splits over threads, which cost more than they save here.
        pieces = np.array_split(factor, max(len(rows) // len(total), 1))
        factor, total = np.concatenate([piece @ inverse for piece in pieces]), r @ total
    return factor, total


class _Bands:
    """Bands in the orthonormal coordinates of the wide fit, each reduced to its own rank."""

    def __init__(self, triangles: list[Triangle], factor: np.ndarray):
        width = factor.shape[1]
        shares, residuals, outside = [], [], []
        ends = np.cumsum([len(item.z) for item in triangles])
        for item, share in zip(triangles, np.split(factor, ends)[: len(ends)], strict=True):
            rotation, reduced, pivots = qr(share, mode="full", pivoting=True, check_finite=False)
            rank = max(int(np.sum(np.abs(np.diag(reduced)) > 1e-11)), 1)
            rotated = rotation.T @ item.z
            compact = np.zeros((rank, width))
            compact[:, pivots] = reduced[:rank]
            shares.append(compact)
            residuals.append(rotated[:rank])
            outside.append(item.rss + float(rotated[rank:] @ rotated[rank:]))
        tallest = max(len(item) for item in shares)
        self.shares = np.zeros((len(shares), tallest, width))
        self.z = np.zeros((len(shares), tallest))
        for index, (share, residual) in enumerate(zip(shares, residuals, strict=True)):
            self.shares[index, : len(share)] = share
            self.z[index, : len(residual)] = residual
        self.lines = np.array([item.n for item in triangles])
        self.outside = np.array(outside)
        # A trace of the identity keeps the factor of a singular matrix real; it moves no pivot that counts.
        self._identity = np.eye(tallest) * (1 + 0.1 * _ALONE)

    def left_out(self, basis: np.ndarray, step: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Squared whitened errors, and log predictive density, of each band predicted by the others; shape (bands,).

        Parameters
        ----------
        basis : ndarray of float, shape (p wide, p)
            Orthonormal basis of the candidate's columns.
        step : ndarray of float, shape (p wide,)
            R (c - base) of the candidate, in the coordinates of R.
        """
        # A product for each band: BLAS would split one large product over threads, at more than it saves.
        residual = self.shares @ step - self.z
        own = self.shares @ basis
        lower = np.linalg.cholesky(self._identity - own @ own.transpose(0, 2, 1))
        pivots = np.einsum("gii->gi", lower)
        alone = pivots.min(axis=1) ** 2 < _ALONE
        half, predicted = _substitute(lower, residual)
        errors = (predicted**2).sum(axis=1) + self.outside
        density = np.log(pivots).sum(axis=1) - 0.5 * ((half**2).sum(axis=1) + self.outside)
        return np.where(alone, np.inf, errors), np.where(alone, -np.inf, density)


def _substitute(lower: np.ndarray, right: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """L^-1 b and L^-T L^-1 b for many triangles at once, shapes (bands, m, m) and (bands, m)."""
    half = right.copy()
    for i in range(half.shape[1]):
        half[:, i] -= np.einsum("gj,gj->g", lower[:, i, :i], half[:, :i])
        half[:, i] /= lower[:, i, i]
    whole = half.copy()
    for i in reversed(range(half.shape[1])):
        whole[:, i] /= lower[:, i, i]
        whole[:, :i] -= lower[:, i, :i] * whole[:, i, None]
    return half, whole
