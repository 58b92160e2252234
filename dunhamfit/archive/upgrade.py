"""Format versions: opening an archive of any age.

An older archive is brought up to date in memory when it is read, and in the new file when
a run is added; the old file is never changed. Each step does one version.
"""

from __future__ import annotations

import io
from collections.abc import Callable, Mapping
from pathlib import Path
from types import MappingProxyType

import h5py

from dunhamfit.archive.schema import FORMAT, FORMAT_VERSION
from dunhamfit.errors import ArchiveProblem
from dunhamfit.lines.faults import visible

_SIGNATURE = b"\x89HDF\r\n\x1a\n"

# Version -> what turns an open file of that version into one of the next. Version 1 is the first.
STEPS: Mapping[int, Callable[[h5py.File], None]] = MappingProxyType({})


def open_current(path: Path) -> h5py.File:
    """Open an archive for reading, in the current format whatever its age.

    Raises
    ------
    ArchiveProblem
        If the file is missing, is no archive, is cut short, or is of a later format.
    """
    _check_signature(path)
    try:
        # Writers never change a file in place, so that no lock is needed, and none can fail.
        file = h5py.File(path, "r", locking=False)
    except OSError as error:
        raise ArchiveProblem(
            f"{path}: the archive is cut short or damaged ({visible(str(error), at_most=150)}); restore it from a "
            "copy, or repeat the fit into a new archive"
        ) from error
    try:
        if version_of(file, path) == FORMAT_VERSION:
            return file
    except BaseException:
        file.close()
        raise
    file.close()
    in_memory = h5py.File(io.BytesIO(path.read_bytes()), "r+")
    bring_up_to_date(in_memory, path)
    return in_memory


def bring_up_to_date(file: h5py.File, path: Path) -> None:
    """Take an open, writable file through every step that it lacks."""
    while (version := version_of(file, path)) < FORMAT_VERSION:
        STEPS[version](file)
        file.attrs.create("format_version", version + 1, dtype="<i8")


def version_of(file: h5py.File, path: Path) -> int:
    """Format version of an open file.

    Raises
    ------
    ArchiveProblem
        If it is no archive, or of a version that this program does not know.
    """
    if file.attrs.get("format") != FORMAT:
        raise ArchiveProblem(
            f"{path}: this HDF5 file is not an archive of dunhamfit; give one that 'dunhamfit fit' has written"
        )
    version = int(file.attrs["format_version"])
    if version > FORMAT_VERSION:
        writer = visible(str(file.attrs.get("written_by", "a later dunhamfit")), at_most=40)
        raise ArchiveProblem(
            f"{path}: the archive has format version {version}, and this program knows versions up to "
            f"{FORMAT_VERSION}; it needs {writer} or later"
        )
    if version < FORMAT_VERSION and version not in STEPS:
        raise ArchiveProblem(f"{path}: format version {version} does not exist; the archive is damaged")
    return version


def _check_signature(path: Path) -> None:
    try:
        with open(path, "rb") as file:
            start = file.read(len(_SIGNATURE))
    except FileNotFoundError:
        raise ArchiveProblem(
            f"{path}: there is no such archive; check the name, or make it with 'dunhamfit fit'"
        ) from None
    except OSError as error:
        raise ArchiveProblem(f"{path}: the archive cannot be read: {error.strerror}") from error
    if start != _SIGNATURE:
        what = "it is empty" if not start else "it is not an HDF5 file"
        raise ArchiveProblem(f"{path}: this is no archive: {what}; give one that 'dunhamfit fit' has written")
