"""Is the archive still what it says? Every run repeated from the file alone.

Reading a run, its lines or its samples compares them with their hashes, so that what has
changed on the disk is told here too.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

from dunhamfit.archive.runs import StoredRun
from dunhamfit.archive.store import Archive
from dunhamfit.errors import DunhamfitError, UsageError
from dunhamfit.fit.record import Fit
from dunhamfit.fit.solve import fit_model

# A repeat does the same operations on the same numbers; another processor or library may sum them in another
# order. A constant may move by this part of its value, or of its sigma if that is larger.
TOLERANCE = 1e-10


@dataclass(frozen=True)
class RunCheck:
    """What repeating one run gave.

    Attributes
    ----------
    run : int
    agrees : bool
        Whether the repeat agrees and nothing has changed since the run was stored.
    difference : float
        Largest difference of the repeat, as a part of what it is compared with; NaN where the run
        could not be repeated.
    where : str
        What differs most.
    problems : tuple of str
        Why it does not agree; empty where it does.
    """

    run: int
    agrees: bool
    difference: float
    where: str
    problems: tuple[str, ...]


def repeat(stored: StoredRun) -> Fit:
    """The same fit from the stored lines and model: plain least squares with the stored error policy.

    Raises
    ------
    UsageError
        For a run that was made in another way, which its robust loss or its origin tells.
    """
    fit = stored.fit
    if fit.robust != "none" or stored.origin:
        how = f"robust loss '{fit.robust}'" if fit.robust != "none" else f"origin {dict(stored.origin)!r}"
        raise UsageError(f"run {stored.run} is not a plain fit ({how}); it needs the routine that made it")
    return fit_model(fit.model, fit.lines, policy=fit.noise.policy)


def verify(archive: Archive, *, refit: Callable[[StoredRun], Fit] = repeat) -> tuple[RunCheck, ...]:
    """Repeat every run and compare: constants, sigmas, noise factors and chi2 to 1e-10.

    Parameters
    ----------
    archive : Archive
    refit : callable
        Makes the fit of a stored run again. The routines for relations, potentials and robust losses
        are not known here; whoever knows them passes a callable that does, and leaves plain fits to `repeat`.

    Returns
    -------
    tuple of RunCheck
        In the order in which the runs were stored.
    """
    return tuple(_check(archive, number, refit) for number in archive.numbers())


def differences(old: Fit, new: Fit) -> dict[str, float]:
    """By how much `new` differs, by name: each as a part of the value, or of its sigma if that is larger.

    Sigmas, noise factors and chi2 are compared with themselves. What only one of the two has
    differs without bound.
    """
    if (old.model.names, old.noise.names) != (new.model.names, new.noise.names):
        return {"the set of parameters or noise factors": float("inf")}
    found = {}
    for name, first, second, sigma, new_sigma in zip(
        old.model.names, old.values, new.values, old.sigmas, new.sigmas, strict=True
    ):
        found[name] = _part(first - second, max(abs(first), sigma))
        found[f"sigma of {name}"] = _part(sigma - new_sigma, sigma)
    for name, first, second in zip(old.noise.names, old.noise.factors, new.noise.factors, strict=True):
        found[f"noise factor of {name}"] = _part(first - second, first)
    found["chi2"] = _part(old.statistics.chi2 - new.statistics.chi2, old.statistics.chi2)
    return found


def _part(difference: float, whole: float) -> float:
    if difference == 0:
        return 0.0
    return float(abs(difference) / whole) if whole else float("inf")


def _largest(found: dict[str, float]) -> tuple[str, float]:
    where = max(found, key=lambda name: (math.isnan(found[name]), found[name]))
    return where, found[where]


def _check(archive: Archive, number: int, refit: Callable[[StoredRun], Fit]) -> RunCheck:
    problems: list[str] = []
    difference, where = float("nan"), ""
    try:
        stored = archive.stored(number)
        problems += _parent_problems(archive, stored)
        if f"runs/{number}/posterior" in archive.file:
            archive.posterior(number)
        if not problems:
            where, difference = _largest(differences(stored.fit, refit(stored)))
            if not difference <= TOLERANCE:
                problems.append(f"{where} differs by {difference:.1e} of its size when the run is repeated")
    except DunhamfitError as error:
        problems.append(str(error))
    return RunCheck(number, not problems, difference, where, tuple(problems))


def _parent_problems(archive: Archive, stored: StoredRun) -> list[str]:
    if stored.parent is None:
        return []
    if stored.parent not in archive.numbers():
        return [f"its parent, run {stored.parent}, is missing"]
    if archive.identity(stored.parent) != stored.parent_identity:
        return [f"its parent, run {stored.parent}, is no longer the run it was made from"]
    return []
