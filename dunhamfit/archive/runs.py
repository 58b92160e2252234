"""One run: a fit written into its group, and read from it as the same fit."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from types import MappingProxyType

import h5py

from dunhamfit.archive.inputs import as_text, inputs_document, model_of
from dunhamfit.archive.schema import (
    GROUPS,
    NOISE,
    OPTIONAL,
    RUN,
    STATISTICS,
    TRIANGLES,
    Value,
    checked,
    contents,
    digest,
    write,
    write_items,
)
from dunhamfit.archive.stretches import lines_of, write_lines
from dunhamfit.archive.triangles import read_triangles, triangles_pay, write_factors
from dunhamfit.errors import ArchiveProblem
from dunhamfit.fit.design import Groups
from dunhamfit.fit.noise import Noise
from dunhamfit.fit.record import Fit, Statistics

# Residuals follow from the lines and the values. They are stored for those who read the file with
# other programs, as long as they are small beside the rest.
_RESIDUALS_UP_TO = 20_000
_SUBGROUPS = {"noise": NOISE, "groups": GROUPS, "statistics": STATISTICS, "triangles": TRIANGLES}
# Has the last word of a run: it covers all that stands there but what is added later.
CHECKSUM, POSTERIOR = "checksum", "posterior"


@dataclass(frozen=True)
class RunSummary:
    """One run as `history` lists it.

    Attributes
    ----------
    run : int
    parent : int or None
        The run it was made from or after.
    identity, parent_identity : str
        SHA-256 of what the run, and its parent, was made from; the latter empty where there is none.
    time : str
        UTC, ISO 8601.
    title : str
    lines, used : int
    sources : tuple of str
    added : tuple of str
        Sources that the parent does not have; all of them where there is no parent.
    policy : str
    parameters : int
        Free ones.
    reduced_chi2 : float
    posterior : bool
        Whether samples are stored with it.
    """

    run: int
    parent: int | None
    identity: str
    parent_identity: str
    time: str
    title: str
    lines: int
    used: int
    sources: tuple[str, ...]
    added: tuple[str, ...]
    policy: str
    parameters: int
    reduced_chi2: float
    posterior: bool


@dataclass(frozen=True, eq=False)
class StoredRun:
    """One run in full.

    Attributes
    ----------
    run : int
    fit : Fit
        Its lines are read when they are first looked at.
    identity, parent_identity : str
    parent : int or None
    time, title, job_text : str
    notices : tuple of str
        What was said while its files were read.
    origin : mapping
        What else it was made with, as given to `Archive.save`.
    versions : mapping from program to version
    """

    run: int
    fit: Fit
    identity: str
    parent: int | None
    parent_identity: str
    time: str
    title: str
    job_text: str
    notices: tuple[str, ...]
    origin: Mapping[str, object]
    versions: Mapping[str, str]


def write_run(
    file: h5py.File, number: int, fit: Fit, *, job_text: str, origin: Mapping, said: Mapping[str, object]
) -> None:
    """Write a fit as run `number`; `said` is the rest of its record (title, time, parent, versions, notices)."""
    stretches, order = write_lines(file, fit.lines)
    document = inputs_document(
        fit, stretches=stretches, order=digest({"order": order}) if order is not None else "", origin=origin
    )
    inputs = as_text(document)
    record = {**said, "warnings": list(fit.warnings), "origins": dict(fit.origins)}
    group = file.create_group(f"runs/{number}")
    values = {
        "inputs": inputs,
        "record": as_text(record),
        "job": job_text,
        "names": fit.model.names,
        "values": fit.values,
        "factor": fit.factor,
        "residuals": fit.residuals if len(fit.lines) <= _RESIDUALS_UP_TO else None,
        "line_weights": fit.line_weights,
        "order": order,
    }
    written = write_items(group, [*RUN, *(item for item in OPTIONAL if values[item.name] is not None)], values)
    parts = {"noise": vars(fit.noise), "groups": vars(fit.groups), "statistics": vars(fit.statistics)}
    if triangles_pay(fit):
        parts["triangles"] = write_factors(file, fit)
    for name, part in parts.items():
        found = write_items(group.create_group(name), _SUBGROUPS[name], part)
        written |= {f"{name}/{key}": value for key, value in found.items()}
    write(group, CHECKSUM, digest(written), "text")


def read_run(group: h5py.Group, number: int, path: Path) -> StoredRun:
    """The run in `group`.

    Raises
    ------
    ArchiveProblem
        If it does not agree with its checksum.
    """
    found = contents(group, without=(POSTERIOR,))
    if checksum_of(found) != found.get(CHECKSUM):
        raise ArchiveProblem(
            f"run {number} has changed since it was stored: it does not agree with its checksum; "
            "restore the archive from a copy"
        )
    sizes: dict[str, int] = {}
    top = checked(found, [*RUN, *(item for item in OPTIONAL if item.name in found)], where=group.name, sizes=sizes)
    document, record = json.loads(top["inputs"]), json.loads(top["record"])
    noise, groups, statistics = (
        checked(_below(found, name), _SUBGROUPS[name], where=f"{group.name}/{name}", sizes=sizes)
        for name in ("noise", "groups", "statistics")
    )
    fit = Fit(
        model=model_of(document),
        lines=lines_of(path, document, top.get("order")),
        values=top["values"],
        factor=top["factor"],
        noise=Noise(policy=document["policy"], **{**noise, "determined": noise["determined"].astype(bool)}),
        groups=Groups(**groups),
        statistics=Statistics(**{name: value.item() for name, value in statistics.items()}),
        warnings=tuple(record["warnings"]),
        robust=document["robust"],
        line_weights=top.get("line_weights"),
        origins=MappingProxyType(record["origins"]),
    )
    if fit.model.names != top["names"]:
        raise ArchiveProblem(f"run {number}: the parameters are not those of its model: the archive is damaged")
    if stored := _below(found, "triangles"):
        stored = checked(stored, TRIANGLES, where=f"{group.name}/triangles")
        # `Fit.triangles` is made from the lines on first use, unless it is there already.
        vars(fit)["triangles"] = read_triangles(group.file, stored, fit.values)
    return StoredRun(
        run=number,
        fit=fit,
        identity=identity_of(top["inputs"]),
        parent=record["parent"],
        parent_identity=record["parent_identity"],
        time=record["time"],
        title=record["title"],
        job_text=top["job"],
        notices=tuple(record["notices"]),
        origin=MappingProxyType(document["origin"]),
        versions=MappingProxyType(record["versions"]),
    )


def read_summary(group: h5py.Group, number: int, before: Mapping[int, RunSummary]) -> RunSummary:
    """The run in `group` in short; `before` are the runs before it, by number."""
    inputs = group["inputs"].asstr()[()]
    document, record = json.loads(inputs), json.loads(group["record"].asstr()[()])
    statistics = group["statistics"]
    sources = tuple(item["name"] for item in document["sources"])
    parents = before[record["parent"]].sources if record["parent"] in before else ()
    return RunSummary(
        run=number,
        parent=record["parent"],
        identity=identity_of(inputs),
        parent_identity=record["parent_identity"],
        time=record["time"],
        title=record["title"],
        lines=sum(stretch["count"] for stretch in document["lines"]),
        used=int(statistics["lines"][()]),
        sources=sources,
        added=tuple(name for name in sources if name not in parents),
        policy=document["policy"],
        parameters=int(statistics["parameters"][()]),
        reduced_chi2=float(statistics["reduced_chi2"][()]),
        posterior=POSTERIOR in group,
    )


def checksum_of(found: Mapping[str, Value]) -> str:
    """What the checksum of a run should be, from all that stands in its group but samples."""
    return digest({name: value for name, value in found.items() if name != CHECKSUM})


def identity_of(inputs: str) -> str:
    """SHA-256 of what a run was made from."""
    return hashlib.sha256(inputs.encode()).hexdigest()


def _below(found: Mapping[str, Value], name: str) -> dict[str, Value]:
    """The contents of a subgroup."""
    return {path.partition("/")[2]: value for path, value in found.items() if path.startswith(f"{name}/")}
