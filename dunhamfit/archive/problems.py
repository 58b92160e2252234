"""What goes wrong with a file, in one line: what happened, where, and what to do about it."""

from __future__ import annotations

import os
import re
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from dunhamfit.errors import ArchiveProblem, DunhamfitError
from dunhamfit.lines.faults import visible

_ERRNO = re.compile(r"errno = (\d+)")
# What h5py, numpy and json raise for files that are damaged in one way or another.
_SIGNS_OF_DAMAGE = (OSError, RuntimeError, LookupError, TypeError, ValueError, ArithmeticError)


@contextmanager
def reading(path: Path) -> Iterator[None]:
    """Turn whatever a damaged file causes into an `ArchiveProblem`."""
    try:
        yield
    except DunhamfitError as error:
        if isinstance(error, ArchiveProblem) and not str(error).startswith(str(path)):
            raise ArchiveProblem(f"{path}: {error}") from error
        raise
    except _SIGNS_OF_DAMAGE as error:
        raise ArchiveProblem(
            f"{path}: the archive is damaged ({reason(error)}); restore it from a copy, "
            "or repeat the fit into a new archive"
        ) from error


@contextmanager
def writing(path: Path) -> Iterator[None]:
    """Turn a failed write into an `ArchiveProblem`."""
    try:
        yield
    except DunhamfitError:
        raise
    except (OSError, RuntimeError, ValueError) as error:
        raise ArchiveProblem(
            f"{path}: nothing was stored: {reason(error)}; what the archive held is untouched. "
            "Make room or correct this, or store into another place"
        ) from error


def reason(error: Exception) -> str:
    """Why, in a few words on one line."""
    text = str(error)
    if found := _ERRNO.search(text):
        # The messages of HDF5 carry the number of the system's error in a long account of buffers.
        return os.strerror(int(found[1]))
    if isinstance(error, OSError) and error.strerror and error.errno:
        return error.strerror
    first = text.partition("\n")[0]
    return visible(first, at_most=150) or type(error).__name__
