"""A job carried out: its sources read, its model made and fitted."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np

from dunhamfit.errors import InputFaults, UsageError
from dunhamfit.fit.model import Model
from dunhamfit.fit.record import Fit
from dunhamfit.fit.solve import make_model
from dunhamfit.inference.routes import Route, fit_route
from dunhamfit.inference.selection import Selection, select_terms
from dunhamfit.inference.widest import GENEROUS
from dunhamfit.job.tables import Exclusion, Job
from dunhamfit.lines.faults import Fault, raise_faults
from dunhamfit.lines.line_list import LineList, merge
from dunhamfit.lines.reading import Reading, read_source
from dunhamfit.lines.request import SourceRequest
from dunhamfit.molecule.isotopologue import Isotopologue, check_same_molecule
from dunhamfit.molecule.terms import Term, parse_indices
from dunhamfit.show.selection_report import recommendation_words


@dataclass(frozen=True, eq=False)
class JobReading:
    """What reading all sources of a job gave.

    Attributes
    ----------
    lines : LineList or None
        None if there are faults.
    readings : tuple of Reading
        One a source, in the order of the job.
    faults : tuple of Fault
    notices : tuple of str
    """

    lines: LineList | None
    readings: tuple[Reading, ...]
    faults: tuple[Fault, ...]
    notices: tuple[str, ...] = field(default=())


def read_job_lines(job: Job) -> JobReading:
    """Read every source of a job; faults of all sources are returned together, not raised."""
    reference = Isotopologue.parse(job.reference, job.masses)

    def check(name: str) -> str:
        other = Isotopologue.parse(name, job.masses)
        check_same_molecule(reference, other)
        return other.name

    readings = tuple(read_source(request, check_isotopologue=check) for request in job.sources)
    faults = [fault for reading in readings for fault in reading.faults]
    faults += _listed_twice(job.sources)
    notices = tuple(notice for reading in readings for notice in reading.notices)
    if faults:
        return JobReading(None, readings, tuple(faults), notices)
    lines = merge([reading.lines for reading in readings])
    return JobReading(exclude_rows(lines, job.exclusions), readings, (), notices)


def job_lines(job: Job) -> LineList:
    """The lines of a job.

    Raises
    ------
    InputFaults
        With the faults of every source.
    """
    reading = read_job_lines(job)
    if reading.lines is None:
        raise_faults(reading.faults, rows_fine=sum(len(item.lines) for item in reading.readings))
        raise InputFaults(reading.faults)
    return reading.lines


def job_model(job: Job, lines: LineList) -> Model:
    """The model that a job asks for."""
    return make_model(
        lines,
        job.terms,
        reference=job.reference,
        breakdown=job.breakdown,
        priors=job.priors,
        masses=job.masses,
    )


def fit_job(job: Job, lines: LineList | None = None) -> Fit:
    """Read the lines of a job, unless they are given, and fit its model to them."""
    lines = job_lines(job) if lines is None else lines
    if job.terms is None:
        job, remark = _with_selected_terms(job, lines)
        fit = fit_job(job, lines)
        return replace(fit, warnings=(remark, *fit.warnings))
    route = Route(relations=job.relations, bounds=job.bounds, potential=job.potential)
    return fit_route(job_model(job, lines), lines, route, policy=job.policy, robust=job.robust)


def select_job(
    job: Job,
    lines: LineList,
    *,
    widest: Sequence[int] = GENEROUS,
    progress: Callable[[int, int], None] | None = None,
) -> Selection:
    """Compare the sets of terms that the lines of a job can determine, whatever terms it asks for."""
    if job.relations or job.bounds or job.potential:
        raise UsageError(
            "sets of terms are compared by linear fits; give [model] terms as a list where there are relations or a "
            "potential"
        )
    return select_terms(
        lines,
        reference=job.reference,
        breakdown=job.breakdown,
        priors=job.priors,
        policy=job.policy,
        masses=job.masses,
        widest=widest,
        progress=progress,
    )


def _with_selected_terms(job: Job, lines: LineList) -> tuple[Job, str]:
    """The job with the recommended terms, and what was chosen and why; breakdown terms stay with their terms."""
    selection = select_job(job, lines)
    terms = selection.recommended.terms
    breakdown, left = {}, []
    for atom, names in job.breakdown.items():
        kept = [name for name in names if Term(*parse_indices(name)) in terms]
        left += [f"d{name}_{atom}" for name in names if name not in kept]
        breakdown[atom] = tuple(kept)
    priors = {name: prior for name, prior in job.priors.items() if name not in left}
    remark = recommendation_words(selection)
    if left:
        remark += f". Left out with their terms: {', '.join(left)}"
    return replace(job, terms=terms, breakdown=breakdown, priors=priors), remark


def exclude_rows(lines: LineList, exclusions: tuple[Exclusion, ...]) -> LineList:
    """The lines without the rows that a job leaves out.

    Raises
    ------
    UsageError
        If a row or file does not exist.
    """
    for exclusion in exclusions:
        lines = lines.excluded(_excluded_rows(lines, exclusion), exclusion.reason)
    return lines


def _excluded_rows(lines: LineList, exclusion: Exclusion) -> np.ndarray:
    code = next(i for i, source in enumerate(lines.sources) if source.name == exclusion.source)
    files = lines.sources[code].files
    mask = (lines.source == code) & np.isin(lines.row, exclusion.rows)
    if exclusion.file or len(files) > 1:
        if exclusion.file not in files:
            raise UsageError(f"exclude: source '{exclusion.source}' has several files; name one of {', '.join(files)}")
        mask &= lines.file == files.index(exclusion.file)
    missing = sorted(set(exclusion.rows) - set(lines.row[mask].tolist()))
    if missing:
        raise UsageError(
            f"exclude: source '{exclusion.source}' has no line on row {', '.join(map(str, missing))} of its file"
        )
    return mask


def _listed_twice(sources: tuple[SourceRequest, ...]) -> list[Fault]:
    """Files that two sources name; twice in one source is found while reading it."""
    owner: dict[Path, str] = {}
    faults = []
    for request in sources:
        for path, shown in zip(request.files, request.shown, strict=True):
            first = owner.setdefault(path.resolve(), request.name)
            if first != request.name:
                faults.append(
                    Fault(
                        shown,
                        0,
                        "the file is listed twice",
                        f'sources "{first}" and "{request.name}" both name it and its lines would count double',
                        "remove it from one of them",
                    )
                )
    return faults
