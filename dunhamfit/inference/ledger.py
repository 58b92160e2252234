"""The ledger: every line that does not belong, and what the constants would be without those.

How lines are judged is told in `dunhamfit.inference.outliers`. Nothing is excluded here. Lines that
the job excludes by row are shown beside the entries, judged in the same way.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from dunhamfit.errors import CannotDetermine, NotConverged
from dunhamfit.fit.record import Fit
from dunhamfit.fit.solve import fit_model
from dunhamfit.inference.diagnosis import Diagnosis, diagnose
from dunhamfit.inference.outliers import REASON, Search, limit, search
from dunhamfit.inference.studentised import Studentised, studentise
from dunhamfit.lines.line_list import LineList

# Chance of any entry for a list without wrong lines.
LEVEL = 0.01
# What reasons of exclusion that mean a choice of lines, not single ones, begin with.
_CHOICE = "use: "


@dataclass(frozen=True)
class Entry:
    """One line that is large, or that the job excludes by row.

    Attributes
    ----------
    index : int
        In the LineList.
    label, place, source : str
        Such as `28Si32S 2-0 P(10)`, `laser.txt:32`, `laser`.
    off, sigma : float, cm-1
        Observed less calculated by the fit without the listed lines; 1 sigma of the line, noise factor included.
    t : float
        `off` over its uncertainty, that of the prediction included.
    residual : float, cm-1
        Observed less calculated by the fit as it is.
    leverage : float
        Share that the line has in its own calculated position in the fit as it is, 0 to 1.
    weight : float
        What the robust loss leaves of its weight in the fit as it is; 1 in a plain fit, 0 if the job excludes it.
    reason : str
        What it may be; of an excluded line, the reason that the job gives.
    diagnosis : Diagnosis or None
        None for excluded lines, and where the listed lines cannot be left out.
    """

    index: int
    label: str
    place: str
    source: str
    off: float
    sigma: float
    t: float
    residual: float
    leverage: float
    weight: float
    reason: str
    diagnosis: Diagnosis | None = None


@dataclass(frozen=True)
class Shift:
    """One parameter with and without the listed lines, in its unit; NaN where it does not exist without."""

    name: str
    unit: str
    value: float
    sigma: float
    without: float
    sigma_without: float

    @property
    def size(self) -> float:
        """Value with less value without, in sigmas of the latter."""
        return (self.value - self.without) / self.sigma_without if self.sigma_without else float("nan")


@dataclass(frozen=True, eq=False)
class Ledger:
    """What there is to say of single lines; nothing was excluded.

    Attributes
    ----------
    entries : tuple of Entry
        Used lines that do not belong, largest first.
    excluded : tuple of Entry
        Lines that the job excludes by row, in the order of the list.
    shifts : tuple of Shift
        Of all parameters; empty where there are no entries, or they cannot be left out.
    tested : int
        Used lines that were judged.
    untested : int
        Used lines that alone determine something, so that nothing is left to judge them by.
    level : float
    limit : float
        Smallest |t| that is listed, for lines whose uncertainty is known; it is larger for
        those whose noise factor rests on few lines.
    settled : bool
        False where leaving out what is large only makes more lines large.
    remark : str
    """

    entries: tuple[Entry, ...]
    excluded: tuple[Entry, ...]
    shifts: tuple[Shift, ...]
    tested: int
    untested: int
    level: float
    limit: float
    settled: bool = True
    remark: str = ""

    @property
    def rule(self) -> str:
        """The rule in words."""
        lines = self.tested + self.untested
        return (
            "A line is listed if its studentised residual against a fit of the lines not listed has a probability "
            f"below {self.level:g}/{lines} (beyond {self.limit:.2f} sigma for a known uncertainty), so that lines "
            f"without an error give any entry in {self.level:.0%} of cases. Nothing was excluded."
        )


def make_ledger(fit: Fit, *, level: float = LEVEL, refit: Callable[[LineList], Fit] | None = None) -> Ledger:
    """List the lines of a fit that do not belong.

    Parameters
    ----------
    fit : Fit
    level : float
        Chance of any entry for lines without an error.
    refit : callable, optional
        Makes the same kind of fit of other lines; by default a fit of the same model, error policy
        and robust loss. Needed for fits with relations, bounds or a potential.

    Returns
    -------
    Ledger
    """
    lines, policy, robust = fit.lines, fit.noise.policy, fit.robust != "none"
    refit = refit or (lambda others: fit_model(fit.model, others, policy=policy, robust=fit.robust))
    plain = (lambda others: fit_model(fit.model, others, policy=policy)) if robust else refit
    by_row = _excluded_by_row(lines)
    judged = studentise(fit, by_row)
    found = search(fit, judged, by_row, level=level, refit=plain)
    shifts, remark = (), found.remark
    if found.without is not None and found.listed.any():
        try:
            without = refit(lines.excluded(found.listed, REASON)) if robust else found.without
            shifts = _shifts(fit, without)
        except (CannotDetermine, NotConverged) as error:
            remark = f"the same fit cannot be made without the listed lines: {error}"
    tested = int((lines.used & np.isfinite(found.judged.p)).sum())
    return Ledger(
        entries=_entries(fit, judged, found),
        excluded=tuple(
            _entry(fit, index, judged, found.judged, lines.reasons[lines.exclusion[index]])
            for index in np.flatnonzero(by_row)
        ),
        shifts=shifts,
        tested=tested,
        untested=int(lines.used.sum()) - tested,
        level=level,
        limit=limit(fit, level),
        settled=found.settled,
        remark=remark,
    )


def _excluded_by_row(lines: LineList) -> np.ndarray:
    """Lines that the job excludes by row: neither its choice of lines, nor isotopologues that it leaves out."""
    chosen = np.array([bool(reason) and not reason.startswith(_CHOICE) for reason in lines.reasons])
    return chosen[lines.exclusion] & np.isin(lines.isotopologue, lines.isotopologue[lines.used])


def _entries(fit: Fit, as_it_is: Studentised, found: Search) -> tuple[Entry, ...]:
    """Entries, largest first."""
    listed = np.flatnonzero(found.listed)
    listed = listed[np.argsort(-np.abs(found.judged.t[listed]), kind="stable")]
    if found.without is None:
        return tuple(_entry(fit, index, as_it_is, found.judged, "") for index in listed)
    return tuple(
        _entry(fit, index, as_it_is, found.judged, diagnosis.text, diagnosis)
        for index, diagnosis in zip(listed, diagnose(found.without, listed, found.judged.sigma), strict=True)
    )


def _entry(
    fit: Fit, index: int, as_it_is: Studentised, judged: Studentised, reason: str, diagnosis: Diagnosis | None = None
) -> Entry:
    lines = fit.lines
    weight = 1.0 if fit.line_weights is None else float(fit.line_weights[index])
    return Entry(
        index=int(index),
        label=lines.label(index),
        place=lines.place(index),
        source=lines.sources[lines.source[index]].name,
        off=float(judged.residual[index]),
        sigma=float(judged.sigma[index]),
        t=float(judged.t[index]),
        residual=float(as_it_is.residual[index]),
        leverage=float(as_it_is.leverage[index]) * weight,
        weight=weight if lines.used[index] else 0.0,
        reason=reason,
        diagnosis=diagnosis,
    )


def _shifts(fit: Fit, without: Fit) -> tuple[Shift, ...]:
    other = dict(
        zip(without.model.names, zip(without.values.tolist(), without.sigmas.tolist(), strict=True), strict=True)
    )
    missing = (float("nan"), float("nan"))
    return tuple(
        Shift(item.name, item.unit, float(value), float(sigma), *other.get(item.name, missing))
        for item, value, sigma in zip(fit.model.parameters, fit.values, fit.sigmas, strict=True)
    )
