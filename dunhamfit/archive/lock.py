"""One writer at a time. Readers need no lock: a file that they have open never changes."""

from __future__ import annotations

import fcntl
import os
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from dunhamfit.archive.problems import reason
from dunhamfit.errors import ArchiveProblem

# Storing a run takes a fraction of a second, so that two fits which end together both get their turn.
WAIT_SECONDS = 3.0
_BETWEEN_TRIES = 0.02


@contextmanager
def writer_lock(path: Path) -> Iterator[None]:
    """Hold the right to write the archive at `path`.

    The lock is the kernel's own on a file beside the archive, so that it ends with the
    process that holds it, whatever ends that.

    Raises
    ------
    ArchiveProblem
        If another writer holds it for longer than a moment, or its folder cannot be written.
    """
    beside = path.with_name(f".{path.name}.lock")
    handle = _acquire(path, beside)
    try:
        yield
    finally:
        beside.unlink(missing_ok=True)
        os.close(handle)


def _acquire(path: Path, beside: Path) -> int:
    give_up = time.monotonic() + WAIT_SECONDS
    while True:
        handle = _open(path, beside)
        try:
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            holder = os.read(handle, 20).decode("ascii", "replace").strip()
            os.close(handle)
            if time.monotonic() > give_up:
                raise ArchiveProblem(
                    f"{path}: another writer{f' (process {holder})' if holder.isdigit() else ''} has this archive "
                    "open; nothing was stored. Try again when it is done"
                ) from None
            time.sleep(_BETWEEN_TRIES)
            continue
        except OSError:
            # Some network file systems know no locks. `rewritten` still sees a file that changed under it.
            return handle
        if _is_still_there(handle, beside):
            os.truncate(handle, 0)
            os.write(handle, str(os.getpid()).encode())
            return handle
        os.close(handle)


def _open(path: Path, beside: Path) -> int:
    try:
        return os.open(beside, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o666)
    except OSError as error:
        raise ArchiveProblem(
            f"{path}: cannot be written: folder '{path.parent}': {reason(error)}; choose a folder that exists and "
            "that you may write in"
        ) from error


def _is_still_there(handle: int, beside: Path) -> bool:
    """Whether the locked file is the one that others see: the holder before removes it when it lets go."""
    try:
        return os.path.samestat(os.fstat(handle), os.stat(beside))
    except FileNotFoundError:
        return False
