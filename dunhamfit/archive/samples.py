"""Samples of a run: arrays and texts by name, whatever the sampler wishes to keep."""

from __future__ import annotations

import re
from collections.abc import Mapping

import h5py
import numpy as np

from dunhamfit.archive.runs import CHECKSUM, POSTERIOR
from dunhamfit.archive.schema import Value, contents, digest, read, write
from dunhamfit.errors import ArchiveProblem, UsageError

_NAME = re.compile(r"[A-Za-z]\w*", re.ASCII)


def write_samples(run: h5py.Group, arrays: Mapping[str, object], units: Mapping[str, str]) -> None:
    """Write `arrays` into the group of a run, in the place of any that are there."""
    values = {name: _as_value(name, content) for name, content in arrays.items()}
    if POSTERIOR in run:
        del run[POSTERIOR]
    group = run.create_group(POSTERIOR)
    for name, value in values.items():
        write(group, name, value, units.get(name, "1" if isinstance(value, np.ndarray) else "text"))
    write(group, CHECKSUM, digest(contents(group)), "text")


def read_samples(group: h5py.Group) -> dict[str, Value]:
    """What `write_samples` wrote, by name.

    Raises
    ------
    ArchiveProblem
        If it does not agree with its checksum.
    """
    values = contents(group, without=(CHECKSUM,))
    if digest(values) != read(group[CHECKSUM]):
        raise ArchiveProblem(
            f"{group.name} has changed since it was stored: it does not agree with its checksum; "
            "restore the archive from a copy, or sample again"
        )
    return values


def _as_value(name: str, content: object) -> Value:
    if not _NAME.fullmatch(name) or name == CHECKSUM:
        raise UsageError(f"samples must be named with letters, digits and underscores (got {name!r})")
    if isinstance(content, str):
        return content
    array = np.asarray(content)
    if array.dtype.kind in "fiub":
        return array
    if array.dtype.kind == "U" and array.ndim == 1:
        return tuple(array.tolist())
    raise UsageError(f"'{name}' must be an array of real numbers, a text, or a sequence of texts (got {array.dtype})")
