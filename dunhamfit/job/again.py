"""A stored run as a job again: repeated, extended by new sources or changed, from the archive alone."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from types import MappingProxyType

import numpy as np

from dunhamfit.archive.runs import StoredRun
from dunhamfit.errors import UsageError
from dunhamfit.fit.record import Fit
from dunhamfit.job.run import exclude_rows, fit_job
from dunhamfit.job.tables import Job
from dunhamfit.lines.choice import parse_choice
from dunhamfit.lines.line_list import LineList, Source, merge
from dunhamfit.lines.request import SourceRequest
from dunhamfit.molecule.terms import indices
from dunhamfit.units import sigma_to_wavenumber

_USE = "use: "


def origin_of(job: Job) -> dict[str, object]:
    """What a run must keep of a job beside model, lines, error policy and robust loss; empty for a plain fit."""
    model = {}
    if job.relations:
        model["relations"] = dict(job.relations)
    if job.bounds:
        model["bounds"] = {name: list(pair) for name, pair in job.bounds.items()}
    if job.potential:
        model["potential"] = job.potential
    return {"model": model} if model else {}


def job_of(stored: StoredRun) -> Job:
    """The job that makes a stored run again from its lines; it names no files."""
    fit, further = stored.fit, stored.origin.get("model", {})
    breakdown: dict[str, tuple[str, ...]] = {}
    for term in fit.model.breakdown:
        breakdown[term.atom] = (*breakdown.get(term.atom, ()), indices(term.k, term.l))
    return Job(
        path=Path(f"run {stored.run}"),
        text=stored.job_text,
        title=stored.title,
        archive=Path(),
        reference=fit.model.reference.name,
        masses=fit.model.masses,
        sources=(),
        exclusions=(),
        terms=fit.model.terms,
        breakdown=MappingProxyType(breakdown),
        priors=fit.model.priors,
        relations=MappingProxyType(dict(further.get("relations", {}))),
        potential=int(further.get("potential", 0)),
        bounds=MappingProxyType({name: tuple(pair) for name, pair in further.get("bounds", {}).items()}),
        policy=fit.noise.policy,
        robust=fit.robust,
    )


def repeat_run(stored: StoredRun) -> Fit:
    """The fit of a stored run made again from its lines."""
    return fit_job(job_of(stored), stored.fit.lines)


def is_plain(job: Job) -> bool:
    """Whether new lines can be taken in through triangles: a linear fit without weights of its own."""
    return not (job.relations or job.bounds or job.potential) and job.robust == "none"


def new_sources(job: Job, stored: StoredRun) -> tuple[SourceRequest, ...]:
    """The sources of an edited job that the run does not hold: only these are read from files."""
    held = {source.name for source in stored.fit.lines.sources}
    return tuple(request for request in job.sources if request.name not in held)


def edited_lines(job: Job, stored: StoredRun, added: LineList | None) -> LineList:
    """The lines of an edited job: those of the run by the name of their source, and `added` ones.

    Shared errors, choices of lines and exclusions are those of the job.

    Raises
    ------
    UsageError
        If the job gives a stored source another unit or coverage factor, which would need its
        file again, or leaves out a row that does not exist.
    """
    requests = {request.name: request for request in job.sources}
    lines = stored.fit.lines
    kept = np.array([source.name in requests for source in lines.sources], dtype=bool)[lines.source]
    parts = []
    if kept.any():
        lines = lines.subset(kept)
        sources = tuple(_edited(item, requests[item.name]) if item.name in requests else item for item in lines.sources)
        lines = _taken_back(replace(lines, sources=sources), stored.job_text)
        for code, source in enumerate(sources):
            use = requests[source.name].use if source.name in requests else None
            if use is not None:
                left_out = (lines.source == code) & ~parse_choice(use).mask(lines)
                lines = lines.excluded(left_out, f"{_USE}{use}")
        parts.append(_without_empty(lines))
    if added is not None:
        parts.append(added)
    return exclude_rows(merge(parts), job.exclusions)


def _edited(source: Source, request: SourceRequest) -> Source:
    """The stored source with the shared errors that the job gives it."""
    for what, stored, asked in (
        ("unit", source.unit, request.unit),
        ("coverage factor", source.coverage_factor, float(request.coverage_factor or 1)),
    ):
        if stored != asked:
            raise UsageError(
                f"source '{source.name}' is stored with {what} {stored} and the job says {asked}; "
                "give the source another name to have its file read anew"
            )
    offset = request.offset
    if offset is not None and np.isfinite(offset):
        offset = float(sigma_to_wavenumber(offset, 1.0, request.unit))
    return replace(source, offset=offset, scale=request.scale)


def _taken_back(lines: LineList, job_text: str) -> LineList:
    """Lines that the old job left out by choice are in again; those that the readers left out are not."""
    chosen = _exclusion_reasons(job_text)
    back = [code for code, reason in enumerate(lines.reasons) if reason in chosen or reason.startswith(_USE)]
    exclusion = np.where(np.isin(lines.exclusion, back), 0, lines.exclusion)
    return replace(lines, exclusion=exclusion)


def _exclusion_reasons(job_text: str) -> set[str]:
    tables = tomllib.loads(job_text).get("exclude", []) if job_text else []
    return {item["reason"] for item in tables if isinstance(item, Mapping)}


def _without_empty(lines: LineList) -> LineList:
    """The list without sources that no line belongs to."""
    present = np.unique(lines.source)
    code = np.searchsorted(present, lines.source)
    return replace(lines, source=code, sources=tuple(lines.sources[i] for i in present))
