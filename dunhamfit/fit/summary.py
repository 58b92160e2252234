"""A fit seen by band and by source: counts, residuals and how they compare with their uncertainties."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from dunhamfit.fit.record import Fit


@dataclass(frozen=True)
class BandSummary:
    """The lines of one band of one isotopologue, from all sources.

    Attributes
    ----------
    isotopologue : str
    v_upper, v_lower : int
    lines, used : int
        Lines read, and lines used.
    j_min, j_max : int
        Range of J'' of the used lines; -1 where none is used.
    rms, mean_residual : float, cm-1
        Of observed less calculated; NaN where no line is used.
    weighted_rms : float
        Of the residuals over the stated uncertainties.
    """

    isotopologue: str
    v_upper: int
    v_lower: int
    lines: int
    used: int
    j_min: int
    j_max: int
    rms: float
    weighted_rms: float
    mean_residual: float


@dataclass(frozen=True)
class SourceSummary:
    """The lines of one source.

    Attributes
    ----------
    name : str
    lines, used : int
    noise_factor, noise_factor_sigma : float
        NaN where the policy gives this source no single factor of its own.
    reduced_chi2 : float
        Mean square of the residuals over the stated uncertainties, per effective degree of freedom
        of the source (its lines less its share of the parameters).
    mean_residual : float, cm-1
    """

    name: str
    lines: int
    used: int
    noise_factor: float
    noise_factor_sigma: float
    reduced_chi2: float
    mean_residual: float


def summarise_bands(fit: Fit) -> tuple[BandSummary, ...]:
    """One summary for each band of each isotopologue, in the order of isotopologues and v', v''."""
    lines = fit.lines
    width = int(max(lines.v_upper.max(initial=0), lines.v_lower.max(initial=0))) + 1
    key = (lines.isotopologue.astype(np.int64) * width + lines.v_upper) * width + lines.v_lower
    # The lines of a band stand together in this order, so that no band has to look for its own among all.
    order = np.argsort(key, kind="stable")
    firsts = np.flatnonzero(np.diff(key[order], prepend=-1))
    found = []
    for of_band in np.split(order, firsts[1:]) if len(order) else []:
        first = of_band[0]
        code, v_upper, v_lower = lines.isotopologue[first], lines.v_upper[first], lines.v_lower[first]
        chosen = of_band[lines.used[of_band]]
        residual = fit.residuals[chosen]
        found.append(
            BandSummary(
                isotopologue=lines.isotopologues[code],
                v_upper=int(v_upper),
                v_lower=int(v_lower),
                lines=len(of_band),
                used=len(chosen),
                j_min=int(lines.j_lower[chosen].min()) if len(chosen) else -1,
                j_max=int(lines.j_lower[chosen].max(initial=-1)),
                rms=_rms(residual),
                weighted_rms=_rms(residual / lines.sigma[chosen]),
                mean_residual=float(residual.mean()) if len(chosen) else float("nan"),
            )
        )
    return tuple(found)


def summarise_sources(fit: Fit) -> tuple[SourceSummary, ...]:
    """One summary for each source, in the order of the line list."""
    lines, noise = fit.lines, fit.noise
    spent = leverage_by_group(fit)
    found = []
    for code, source in enumerate(lines.sources):
        of_source = lines.source == code
        chosen = of_source & lines.used
        residual = fit.residuals[chosen]
        groups = fit.groups.source == code
        labels = np.unique(noise.label[groups]) if len(noise.factors) else []
        factor = sigma = float("nan")
        if len(labels) == 1:
            factor, sigma = float(noise.factors[labels[0]]), float(noise.sigmas[labels[0]])
        elif noise.policy == "stated" and groups.any():
            factor, sigma = 1.0, 0.0
        dof = chosen.sum() - spent[groups].sum()
        chi2 = float(np.sum((residual / lines.sigma[chosen]) ** 2))
        found.append(
            SourceSummary(
                name=source.name,
                lines=int(of_source.sum()),
                used=int(chosen.sum()),
                noise_factor=factor,
                noise_factor_sigma=sigma,
                reduced_chi2=chi2 / dof if dof > 0.5 else float("nan"),
                mean_residual=float(residual.mean()) if chosen.any() else float("nan"),
            )
        )
    return tuple(found)


def leverage_by_group(fit: Fit) -> np.ndarray:
    """Parameters that each group of lines spends, tr(R_g C R_g^T) / f_g^2, shape (groups,)."""
    return np.array(
        [
            float(np.sum((triangle.r @ fit.factor) ** 2)) / factor**2
            for triangle, factor in zip(fit.triangles, fit.noise.by_group, strict=False)
        ]
    )


def _rms(values: np.ndarray) -> float:
    return float(np.sqrt(np.mean(values**2))) if len(values) else float("nan")
