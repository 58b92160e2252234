"""Changing a file without ever putting at risk what it holds: a new one beside it, flushed, then renamed."""

from __future__ import annotations

import glob
import io
import os
import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from dunhamfit.errors import ArchiveProblem


@contextmanager
def rewritten(path: Path) -> Iterator[io.BytesIO]:
    """The content of the file at `path` to change at will, which replaces it when the block ends well.

    Whatever happens in between, `path` is either the old file or the whole new one (rename is
    atomic by POSIX.1-2017, `rename`). The content is empty where there is no file yet. It is in
    memory, so that a full disk is met by one plain write here, and never inside the HDF5 library,
    which does not survive it. The caller holds the writer's lock.

    Raises
    ------
    ArchiveProblem
        If the file was changed by something that does not keep to the lock.
    """
    before = _state(path)
    content = io.BytesIO(path.read_bytes() if before else b"")
    yield content
    for left_by_a_killed_process in path.parent.glob(f".{glob.escape(path.name)}.*.new"):
        left_by_a_killed_process.unlink(missing_ok=True)
    fresh = path.with_name(f".{path.name}.{os.getpid()}.new")
    try:
        with open(fresh, "wb") as file:
            file.write(content.getbuffer())
            file.flush()
            os.fsync(file.fileno())
        if _state(path) != before:
            raise ArchiveProblem(
                f"{path}: something else changed this archive at the same time; nothing was stored. Try again"
            )
        if before:
            shutil.copymode(path, fresh)
        os.replace(fresh, path)
        _flush_folder(path.parent)
    finally:
        fresh.unlink(missing_ok=True)


def _state(path: Path) -> tuple[int, ...]:
    """What changes when the file does; empty where there is none."""
    try:
        found = os.stat(path)
    except FileNotFoundError:
        return ()
    return found.st_ino, found.st_size, found.st_mtime_ns


def _flush_folder(folder: Path) -> None:
    """Have the system put the entries of the folder on the disk."""
    handle = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)
