"""What an archive holds: every dataset declared once, and the only code that writes and reads datasets.

```
/  format, format_version, written_by (attributes)
/lines/<hash>        columns of one source as read; the hash is that of the columns
/exclusions/<hash>   which lines of a source a run leaves out, and why
/factors/<hash>      triangular factors R of the groups of one source
/runs/<number>       one fit: what it was made from (`inputs`), what came out, what was said
/runs/<number>/posterior   samples, by name
```

What several runs share stands once, under the hash of its content. Types are float64,
int64 and UTF-8 text, all given explicitly; every dataset bears its unit.
"""

from __future__ import annotations

import hashlib
from collections.abc import Iterable, Mapping
from dataclasses import dataclass

import h5py
import numpy as np

from dunhamfit.errors import ArchiveProblem
from dunhamfit.lines.line_list import line_columns

FORMAT = "dunhamfit archive"
FORMAT_VERSION = 1
# Readable by HDF5 1.10 (2016) and later; its groups and single-chunk datasets are the small ones.
HDF5_VERSIONS = ("v110", "v110")

TEXT = h5py.string_dtype("utf-8")
_TYPES = {"f8": np.dtype("<f8"), "i8": np.dtype("<i8")}
_CHUNK = 65536
# Shorter columns gain nothing from compression that the overhead of a chunk does not eat.
_COMPRESS_FROM = 1000

Value = np.ndarray | str | tuple[str, ...]


@dataclass(frozen=True)
class Item:
    """One dataset.

    Attributes
    ----------
    name : str
    dtype : "f8", "i8" or "text"
    shape : tuple of str
        A symbol for each axis; the same symbol means the same length throughout a run.
    unit : str
    meaning : str
    """

    name: str
    dtype: str
    shape: tuple[str, ...]
    unit: str
    meaning: str


LINES = (
    *(
        Item(
            column.name,
            "f8" if column.metadata["dtype"][0] == "f" else "i8",
            ("lines",),
            column.metadata["unit"],
            column.metadata["meaning"],
        )
        for column in line_columns()
        if column.name not in ("source", "exclusion")
    ),
    Item("isotopologues", "text", ("isotopologues",), "text", "names that the column `isotopologue` indexes"),
)
EXCLUSIONS = (
    Item("line", "i8", ("excluded",), "1", "index of the line in its source"),
    Item("reason", "i8", ("excluded",), "1", "index of the reason"),
    Item("reasons", "text", ("reasons",), "text", "why lines are left out"),
)
RUN = (
    Item("inputs", "text", (), "text", "JSON: what the run was made from; its hash identifies the run"),
    Item("record", "text", (), "text", "JSON: when, with what, after which run, and what was said"),
    Item("job", "text", (), "text", "job file as read"),
    Item("names", "text", ("p",), "text", "names of the parameters"),
    Item("values", "f8", ("p",), "cm-1, 1 for a scale", "parameters"),
    Item("factor", "f8", ("p", "q"), "cm-1, 1 for a scale", "F with covariance F F^T, noise factors included"),
)
OPTIONAL = (
    Item("residuals", "f8", ("lines",), "cm-1", "observed less calculated position of every line"),
    Item("line_weights", "f8", ("lines",), "1", "weights of a robust fit"),
    Item("order", "i8", ("lines",), "1", "place of each line among the stored ones, where sources were mixed"),
)
NOISE = (
    Item("names", "text", ("factors",), "text", "what each noise factor belongs to"),
    Item("label", "i8", ("groups",), "1", "index of the noise factor of each group"),
    Item("factors", "f8", ("factors",), "1", "noise factors"),
    Item("sigmas", "f8", ("factors",), "1", "1 sigma of each"),
    Item("degrees", "f8", ("factors",), "1", "effective degrees of freedom of each"),
    Item("determined", "i8", ("factors",), "1", "1 where the lines can tell the factor, else 0"),
)
GROUPS = (
    Item("source", "i8", ("groups",), "1", "index of the source"),
    Item("isotopologue", "i8", ("groups",), "1", "index of the isotopologue"),
    Item("v_upper", "i8", ("groups",), "1", "vibrational quantum number, upper level"),
    Item("v_lower", "i8", ("groups",), "1", "vibrational quantum number, lower level"),
    Item("lines", "i8", ("groups",), "1", "used lines"),
)
STATISTICS = (
    Item("lines", "i8", (), "1", "used lines"),
    Item("parameters", "i8", (), "1", "free parameters"),
    Item("dof", "i8", (), "1", "degrees of freedom"),
    Item("chi2", "f8", (), "1", "against the stated uncertainties"),
    Item("reduced_chi2", "f8", (), "1", "chi2 / dof"),
    Item("condition", "f8", (), "1", "of the design with columns of unit norm"),
    Item("log_likelihood", "f8", (), "1", "with the noise factors in force"),
    Item("aicc", "f8", (), "1", "corrected Akaike criterion"),
    Item("bic", "f8", (), "1", "Bayes criterion"),
)
# Triangles are about the values of the run; the last one is that of the priors, where there are any.
TRIANGLES = (
    Item("factors", "text", ("stretches",), "text", "hashes under /factors, in the order of the triangles"),
    Item("heights", "i8", ("triangles",), "1", "rows of each triangle"),
    Item("z", "f8", ("rows",), "1", "rotated whitened residuals, one triangle after the other"),
    Item("rss", "f8", ("triangles",), "1", "sum of squares that no parameter can reduce"),
    Item("n", "i8", ("triangles",), "1", "lines"),
    Item("log_sigma", "f8", ("triangles",), "1", "sum of ln(sigma / cm-1)"),
)
FACTORS = (Item("r", "f8", ("entries",), "1/cm-1", "R of whitened rows, upper trapezoids row by row"),)


def write_items(group: h5py.Group, items: Iterable[Item], values: Mapping[str, object]) -> dict[str, Value]:
    """Write each declared dataset from `values`, by name; return what was written."""
    written = {item.name: _as_declared(item, values[item.name]) for item in items}
    for item in items:
        write(group, item.name, written[item.name], item.unit)
    return written


def checked(
    found: Mapping[str, Value], items: Iterable[Item], *, where: str, sizes: dict[str, int] | None = None
) -> dict[str, Value]:
    """The declared datasets among those that `contents` found, held against their declaration.

    Parameters
    ----------
    where : str
        Path of the group, for messages.
    sizes : dict from symbol to length, optional
        Lengths known so far; filled in, so that several groups can be held against each other.

    Raises
    ------
    ArchiveProblem
        If one is missing, or has another type or shape than declared.
    """
    sizes = {} if sizes is None else sizes
    for item in items:
        _check(found, item, f"{where}/{item.name}", sizes)
    return {item.name: found[item.name] for item in items}


def write(group: h5py.Group, name: str, value: Value, unit: str) -> None:
    """Write one array of float64 or int64, one text, or several."""
    if isinstance(value, np.ndarray):
        options = {"dtype": _TYPES[_kind(value)]}
        # Positions and residuals do not compress; counters and repeated uncertainties do, to almost nothing.
        if value.ndim == 1 and len(value) >= _COMPRESS_FROM and _repeats(value):
            chunk = (min(len(value), _CHUNK),)
            options |= {"chunks": chunk, "shuffle": True, "compression": "gzip", "compression_opts": 1}
    else:
        value = value if isinstance(value, str) else np.array(value, dtype=object)
        options = {"dtype": TEXT}
    group.create_dataset(name, data=value, **options).attrs["unit"] = unit


def read(dataset: h5py.Dataset) -> Value:
    """What `write` wrote."""
    if h5py.check_string_dtype(dataset.dtype) is not None:
        text = dataset.asstr()[()]
        return text if isinstance(text, str) else tuple(text)
    if dataset.dtype not in _TYPES.values():
        raise ArchiveProblem(f"{dataset.name} is of type {dataset.dtype}, which no archive holds: it is damaged")
    return np.asarray(dataset[()])


def write_once(file: h5py.File, family: str, items: Iterable[Item], values: Mapping[str, object]) -> str:
    """Write declared datasets under the hash of their content, unless they are there; return the hash."""
    key = digest({item.name: _as_declared(item, values[item.name]) for item in items})
    if f"{family}/{key}" not in file:
        write_items(file.create_group(f"{family}/{key}"), items, values)
    return key


def read_once(file: h5py.File, family: str, key: str, items: Iterable[Item]) -> dict[str, Value]:
    """What `write_once` wrote under `key`.

    Raises
    ------
    ArchiveProblem
        If it is not there, does not agree with its hash, or is not as declared.
    """
    where = f"/{family}/{key}"
    group = file.get(where)
    if not isinstance(group, h5py.Group):
        raise ArchiveProblem(f"{where} is missing: the file is damaged, or is no longer the one that was opened")
    found = contents(group)
    if digest(found) != key:
        raise ArchiveProblem(f"{where} has changed since it was stored; restore the archive from a copy")
    return checked(found, items, where=where)


def digest(values: Mapping[str, Value]) -> str:
    """SHA-256 of named arrays and texts, hexadecimal; the same wherever they are stored."""
    found = hashlib.sha256()
    for name in sorted(values):
        value = values[name]
        if isinstance(value, np.ndarray):
            content = np.ascontiguousarray(value, dtype=_TYPES[_kind(value)])
            head = f"{name} {_kind(value)} {value.shape}"
        else:
            texts = (value,) if isinstance(value, str) else value
            encoded = [text.encode("utf-8", "surrogatepass") for text in texts]
            head, content = f"{name} text {[len(text) for text in encoded]}", b"".join(encoded)
        found.update(head.encode() + b"\0")
        found.update(content)
    return found.hexdigest()


def contents(group: h5py.Group, *, without: tuple[str, ...] = ()) -> dict[str, Value]:
    """All datasets of a group and its subgroups by path, except members of `without`."""
    found: dict[str, Value] = {}
    for name, member in group.items():
        if name in without:
            continue
        if isinstance(member, h5py.Group):
            found |= {f"{name}/{path}": value for path, value in contents(member).items()}
        elif isinstance(member, h5py.Dataset):
            found[name] = read(member)
        else:
            raise ArchiveProblem(f"{group.name}/{name} cannot be read: the archive is damaged")
    return found


def _as_declared(item: Item, value: object) -> Value:
    if item.dtype == "text":
        return value if isinstance(value, str) else tuple(value)
    return np.asarray(value, dtype=_TYPES[item.dtype])


def _repeats(value: np.ndarray) -> bool:
    return value.dtype.kind != "f" or len(np.unique(value[:_COMPRESS_FROM])) < _COMPRESS_FROM // 4


def _kind(value: Value) -> str:
    if isinstance(value, np.ndarray):
        return "f8" if value.dtype.kind == "f" else "i8"
    return "text"


def _check(found: Mapping[str, Value], item: Item, where: str, sizes: dict[str, int]) -> None:
    if item.name not in found:
        raise ArchiveProblem(f"{where} is missing: the archive is damaged")
    value = found[item.name]
    shape = () if isinstance(value, str) else np.shape(value)
    if _kind(value) != item.dtype:
        raise ArchiveProblem(f"{where} must be {item.dtype} (got {_kind(value)}): the archive is damaged")
    if len(shape) != len(item.shape) or any(
        sizes.setdefault(symbol, length) != length for symbol, length in zip(item.shape, shape, strict=True)
    ):
        expected = tuple(sizes.get(symbol, symbol) for symbol in item.shape)
        raise ArchiveProblem(f"{where} must have shape {expected} (got {shape}): the archive is damaged")
