"""The job file (TOML): what to read, what to fit, which errors to believe; checked key by key."""

from __future__ import annotations

import difflib
import math
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from types import MappingProxyType

from dunhamfit.errors import UsageError
from dunhamfit.fit.model import Prior
from dunhamfit.fit.noise import check_policy
from dunhamfit.lines.request import SourceRequest
from dunhamfit.molecule.isotopologue import Isotopologue
from dunhamfit.molecule.masses import Masses
from dunhamfit.molecule.terms import TermSet, parse_indices

_TOP = ("title", "archive", "molecule", "source", "exclude", "model", "errors")
_MOLECULE = ("reference", "masses")
_SOURCE = (
    "name",
    "file",
    "format",
    "isotopologue",
    "columns",
    "band",
    "unit",
    "uncertainty",
    "coverage_factor",
    "offset",
    "scale",
    "use",
    "decimal",
    "delimiter",
    "header",
    "comment",
    "repeats",
    "allow_high_j",
)
_EXCLUDE = ("source", "file", "rows", "reason")
_MODEL = ("terms", "breakdown", "fixed", "relations", "bounds", "potential")
_ERRORS = ("policy", "robust")


@dataclass(frozen=True)
class Exclusion:
    """Rows of one source that the user leaves out, and why."""

    source: str
    rows: tuple[int, ...]
    reason: str
    file: str = ""


@dataclass(frozen=True, eq=False)
class Job:
    """A job file, checked.

    Attributes
    ----------
    path : Path
        The job file; files of sources are relative to its folder.
    text : str
        The file as read, which the archive keeps.
    title : str
    archive : Path
    reference : str
    masses : Masses
    sources : tuple of SourceRequest
    exclusions : tuple of Exclusion
    terms : TermSet or None
        None asks for a selection ("auto").
    breakdown : mapping from element symbol to names such as "10"
    priors : mapping from the name of a constant to Prior
    relations : mapping from the name of a constant to an expression
    potential : int
        Highest coefficient a_N of a potential-consistent fit; 0 for none.
    policy, robust : str
    bounds : mapping from the name of a constant to (lowest, highest), cm-1
    """

    path: Path
    text: str
    title: str
    archive: Path
    reference: str
    masses: Masses
    sources: tuple[SourceRequest, ...]
    exclusions: tuple[Exclusion, ...]
    terms: TermSet | None
    breakdown: Mapping[str, tuple[str, ...]]
    priors: Mapping[str, Prior]
    relations: Mapping[str, str]
    potential: int
    policy: str
    robust: str
    bounds: Mapping[str, tuple[float, float]] = field(default_factory=lambda: MappingProxyType({}))


def read_job(path: str | Path) -> Job:
    """Read and check a job file.

    Raises
    ------
    UsageError
        If the file does not exist, is not TOML, or asks for what does not exist; the message
        names the table and the key.
    """
    path = Path(path)
    try:
        text = path.read_text(encoding="utf-8-sig")
    except FileNotFoundError:
        raise UsageError(f"{path}: the job file does not exist; check its name and folder") from None
    except (OSError, UnicodeDecodeError) as error:
        raise UsageError(f"{path}: the job file cannot be read: {error}") from None
    return parse_job(text, path)


def parse_job(text: str, path: Path) -> Job:
    """A job from its text; `path` says where its files are and names it in messages."""
    try:
        tables = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise UsageError(f"{path}: this is not valid TOML: {error}") from None
    try:
        return _job(tables, text, path)
    except UsageError as error:
        raise UsageError(f"{path}: {error}") from None


def _job(tables: Mapping, text: str, path: Path) -> Job:
    _only(tables, _TOP, "the job")
    molecule = _table(tables, "molecule", _MOLECULE)
    model = _table(tables, "model", _MODEL)
    errors = _table(tables, "errors", _ERRORS)
    if "reference" not in molecule:
        raise UsageError(
            "[molecule] reference is missing; name the isotopologue whose constants are wanted, "
            'such as reference = "28Si32S"'
        )
    if "terms" not in model:
        raise UsageError(
            "[model] terms is missing; give the highest k for l = 0, 1, 2, ..., such as terms = [4, 3, 2, 1]"
        )
    masses = _masses(molecule.get("masses", {}))
    Isotopologue.parse(_text(molecule["reference"], "[molecule] reference"), masses)
    sources = _sources(tables.get("source", []), path.parent)
    priors, relations = _priors(model.get("fixed", {})), _relations(model.get("relations", {}))
    title = _text(tables.get("title", ""), "title")
    archive = _text(tables.get("archive", f"{path.stem}.h5"), "archive")
    return Job(
        path=path,
        text=text,
        title=title,
        archive=path.parent / archive,
        reference=molecule["reference"],
        masses=masses,
        sources=sources,
        exclusions=_exclusions(tables.get("exclude", []), sources),
        terms=_terms(model["terms"], [*priors, *relations]),
        breakdown=_breakdown(model.get("breakdown", {})),
        priors=MappingProxyType(priors),
        relations=MappingProxyType(relations),
        potential=_potential(model.get("potential", 0)),
        bounds=_bounds(model.get("bounds", {})),
        policy=check_policy(errors.get("policy", "stated")),
        robust=_text(errors.get("robust", "none"), "[errors] robust"),
    )


def _only(table: Mapping, known: tuple[str, ...], where: str) -> None:
    for key in table:
        if key not in known:
            near = difflib.get_close_matches(key, known, n=1)
            meant = f"did you mean '{near[0]}'?" if near else f"known: {', '.join(known)}"
            raise UsageError(f"{where}: '{key}' is not known; {meant}")


def _table(tables: Mapping, name: str, known: tuple[str, ...]) -> Mapping:
    table = tables.get(name, {})
    if not isinstance(table, Mapping):
        raise UsageError(f"'{name}' must be a table: write [{name}] on a line of its own")
    _only(table, known, f"[{name}]")
    return table


def _text(value: object, where: str) -> str:
    if not isinstance(value, str):
        raise UsageError(f"{where} must be text in quotes (got {value!r})")
    return value


def _masses(own: object) -> Masses:
    if not isinstance(own, Mapping):
        raise UsageError('[molecule] masses must be a table, such as masses = { "32Si" = 31.974151539 }')
    return Masses.ame2020().with_own(own) if own else Masses.ame2020()


def _sources(tables: object, folder: Path) -> tuple[SourceRequest, ...]:
    if not isinstance(tables, list) or not tables:
        raise UsageError("no source: write a [[source]] table for each spectrum, paper or campaign")
    requests = [_source(table, number, folder) for number, table in enumerate(tables, start=1)]
    names = [request.name for request in requests]
    for name in names:
        if names.count(name) > 1:
            raise UsageError(f"two sources are named '{name}'; give each a name of its own")
    return tuple(requests)


def _source(table: Mapping, number: int, folder: Path) -> SourceRequest:
    name = table.get("name")
    where = f'[[source]] "{name}"' if name else f"[[source]] number {number}"
    _only(table, _SOURCE, where)
    if not name or not isinstance(name, str):
        raise UsageError(f"{where}: name is missing; each source needs one")
    if "file" not in table:
        raise UsageError(f"{where}: file is missing")
    files, shown = _files(table["file"], folder, where)
    options = {key: value for key, value in table.items() if key not in ("name", "file")}
    for key in ("offset", "scale"):
        if options.get(key) == "free":
            options[key] = math.inf
        elif isinstance(options.get(key), str):
            raise UsageError(f'{where}: {key} must be a number or "free" (got {options[key]!r})')
    if isinstance(options.get("comment"), str):
        options["comment"] = (options["comment"],)
    return SourceRequest(name=name, files=files, shown=shown, **options)


def _files(given: object, folder: Path, where: str) -> tuple[tuple[Path, ...], tuple[str, ...]]:
    patterns = [given] if isinstance(given, str) else given
    if not isinstance(patterns, list) or not all(isinstance(item, str) and item for item in patterns):
        raise UsageError(f"{where}: file must be a name, a pattern or a list of them (got {given!r})")
    shown: list[str] = []
    for pattern in patterns:
        found = []
        if any(mark in pattern for mark in "*?[") and not Path(pattern).is_absolute():
            found = sorted(path.relative_to(folder).as_posix() for path in folder.glob(pattern))
        shown += found or [pattern]
    return tuple(folder / name for name in shown), tuple(shown)


def _exclusions(tables: object, sources: tuple[SourceRequest, ...]) -> tuple[Exclusion, ...]:
    exclusions = []
    for number, table in enumerate(tables if isinstance(tables, list) else [tables], start=1):
        where = f"[[exclude]] number {number}"
        _only(table, _EXCLUDE, where)
        source, rows, reason = table.get("source"), table.get("rows"), table.get("reason")
        if source not in [request.name for request in sources]:
            raise UsageError(f"{where}: source {source!r} is not one of the job's sources")
        if not isinstance(rows, list) or not rows or not all(type(row) is int and row > 0 for row in rows):
            raise UsageError(f"{where}: rows must be a list of line numbers of the file, such as [12, 40]")
        if not isinstance(reason, str) or not reason.strip():
            raise UsageError(f"{where}: a reason is needed; it is kept with the run")
        exclusions.append(Exclusion(source, tuple(rows), reason, table.get("file", "")))
    return tuple(exclusions)


def _terms(given: object, named: list[str]) -> TermSet | None:
    """The terms of the model; those that are fixed or related by name belong to it as well."""
    if given == "auto":
        return None
    if not isinstance(given, list) or not given:
        raise UsageError(f'[model] terms must be a list such as [4, 3, 2] or ["Y10", "Y01"], or "auto" (got {given!r})')
    by_name = all(isinstance(item, str) for item in given)
    terms = TermSet.from_names(given) if by_name else TermSet.from_orders(given)
    return TermSet([*terms, *(parse_indices(name) for name in named if name.startswith("Y"))])


def _breakdown(table: object) -> Mapping[str, tuple[str, ...]]:
    if not isinstance(table, Mapping):
        raise UsageError('[model] breakdown must be a table, such as breakdown = { Si = ["10", "01"] }')
    for atom, names in table.items():
        if not isinstance(names, list) or not all(isinstance(name, str) for name in names):
            raise UsageError(f'[model] breakdown: {atom} needs a list of terms, such as ["10", "01"] (got {names!r})')
    return MappingProxyType({atom: tuple(names) for atom, names in table.items()})


def _priors(table: object) -> dict[str, Prior]:
    if not isinstance(table, Mapping):
        raise UsageError("[model] fixed must be a table, such as fixed = { Y05 = -4.6e-23 }")
    priors = {}
    for name, given in table.items():
        entry = given if isinstance(given, Mapping) else {"value": given}
        _only(entry, ("value", "sigma", "from"), f"[model] fixed.{name}")
        value, sigma = entry.get("value"), entry.get("sigma", 0.0)
        if not _is_number(value) or not _is_number(sigma) or sigma < 0:
            raise UsageError(
                f"[model] fixed.{name} must be a value, or {{ value = ..., sigma = ... }} for a prior (got {given!r})"
            )
        priors[name] = Prior(float(value), float(sigma), _text(entry.get("from", ""), f"[model] fixed.{name}.from"))
    return priors


def _is_number(value: object) -> bool:
    return isinstance(value, (int, float)) and not isinstance(value, bool) and math.isfinite(value)


def _bounds(table: object) -> Mapping[str, tuple[float, float]]:
    if not isinstance(table, Mapping):
        raise UsageError("[model] bounds must be a table, such as bounds = { Y03 = [0, 1e-12] }")
    for name, pair in table.items():
        if not isinstance(pair, list) or len(pair) != 2 or not all(_is_number(item) for item in pair):
            raise UsageError(f"[model] bounds.{name} must be [lowest, highest] (got {pair!r})")
    return MappingProxyType({name: (float(low), float(high)) for name, (low, high) in table.items()})


def _relations(table: object) -> Mapping[str, str]:
    if not isinstance(table, Mapping) or not all(isinstance(text, str) for text in table.values()):
        raise UsageError('[model] relations must be a table of texts, such as relations = { Y02 = "-4*Y01**3/Y10**2" }')
    return dict(table)


def _potential(order: object) -> int:
    if type(order) is not int or order < 0:
        raise UsageError(f"[model] potential must be a whole number, the highest a_N (got {order!r})")
    return order
