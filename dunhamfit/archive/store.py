"""The archive: one HDF5 file that keeps every fit with what went into it.

    with open_archive("co.h5", mode="a") as archive:
        run = archive.save(fit)
    with open_archive("co.h5") as archive:
        fit = archive.latest()
"""

from __future__ import annotations

import os
import platform
import sys
from collections.abc import Iterator, Mapping
from contextlib import ExitStack, contextmanager
from datetime import UTC, datetime
from pathlib import Path
from types import MappingProxyType

import h5py
import numpy as np
import scipy

from dunhamfit.archive.lock import writer_lock
from dunhamfit.archive.problems import reading, writing
from dunhamfit.archive.replace import rewritten
from dunhamfit.archive.runs import POSTERIOR, RunSummary, StoredRun, identity_of, read_run, read_summary, write_run
from dunhamfit.archive.samples import read_samples, write_samples
from dunhamfit.archive.schema import FORMAT, FORMAT_VERSION, HDF5_VERSIONS, TEXT, Value
from dunhamfit.archive.upgrade import bring_up_to_date, open_current
from dunhamfit.errors import UsageError
from dunhamfit.fit.record import Fit


def open_archive(path: str | os.PathLike, *, mode: str = "r") -> Archive:
    """Open an archive; use it in a `with` statement.

    Parameters
    ----------
    path : str or path
    mode : "r" or "a"
        "r" reads what stands there at this moment, and hinders no writer. "a" can also store
        runs, and makes the file with the first of them; there is one such writer at a time.

    Raises
    ------
    UsageError
        For another mode.
    ArchiveProblem
        If the file is missing (in mode "r"), damaged, of a later format or no archive at all, or
        (in mode "a") if its folder cannot be written or another writer has it open.
    """
    if mode not in ("r", "a"):
        raise UsageError(f"mode must be 'r' (read) or 'a' (read and append) (got {mode!r})")
    return Archive(Path(path), appends=mode == "a")


class Archive:
    """An open archive; made by `open_archive`.

    Attributes
    ----------
    path : Path
    appends : bool
        Whether runs can be stored.
    """

    def __init__(self, path: Path, *, appends: bool):
        self.path = path
        self.appends = appends
        # Where the path is a link, the file that it stands for is the one to replace.
        self._real = Path(os.path.realpath(path))
        self._file: h5py.File | None = None
        self._closed = False
        self._held = ExitStack()
        try:
            if appends:
                self._held.enter_context(writer_lock(self._real))
            if not appends or self._real.exists():
                self._open()
        except BaseException:
            self.close()
            raise

    def __enter__(self) -> Archive:
        return self

    def __exit__(self, *_) -> None:
        self.close()

    def close(self) -> None:
        """Let go of the file and of the right to write it. Fits that were loaded stay usable."""
        self._shut()
        self._held.close()
        self._closed = True

    def numbers(self) -> tuple[int, ...]:
        """Numbers of the runs, in the order in which they were stored."""
        with reading(self.path):
            return tuple(sorted(int(name) for name in self.file.get("runs", ())))

    def latest_number(self) -> int | None:
        """Number of the last run, None where there is none."""
        return max(self.numbers(), default=None)

    def runs(self) -> tuple[RunSummary, ...]:
        """Every run in short, in the order in which they were stored."""
        found: dict[int, RunSummary] = {}
        with reading(self.path):
            for number in self.numbers():
                found[number] = read_summary(self.file[f"runs/{number}"], number, found)
        return tuple(found.values())

    def load(self, run: int) -> Fit:
        """The fit of a run, with the numbers it had when it was stored.

        Raises
        ------
        UsageError
            If there is no such run.
        ArchiveProblem
            If the file is damaged.
        """
        return self.stored(run).fit

    def latest(self) -> Fit:
        """The fit of the last run.

        Raises
        ------
        UsageError
            If the archive holds no run.
        """
        number = self.latest_number()
        if number is None:
            raise UsageError(f"{self.path}: the archive holds no run yet; make one with 'dunhamfit fit'")
        return self.load(number)

    def stored(self, run: int) -> StoredRun:
        """A run with all that is known of it; raises what `load` raises."""
        with reading(self.path):
            return read_run(self._group(run), run, self._real)

    def identity(self, run: int) -> str:
        """SHA-256 of what a run was made from; two runs with the same one were made from the same things."""
        group = self._group(run)
        with reading(self.path):
            return identity_of(group["inputs"].asstr()[()])

    def save(
        self,
        fit: Fit,
        *,
        job_text: str = "",
        title: str = "",
        parent: int | None = None,
        origin: Mapping[str, object] = MappingProxyType({}),
        notices: tuple[str, ...] = (),
    ) -> int:
        """Store a fit as a new run.

        Parameters
        ----------
        fit : Fit
        job_text : str
            The job file as read.
        title : str
        parent : int, optional
            Run of this archive that the fit goes on from.
        origin : mapping of texts, finite numbers, lists and mappings
            How the fit was made, where its model, lines, error policy and robust loss do not say it
            all: `{"route": "relations", "relations": {...}}`, for example. It is part of what
            identifies the run, and what a repeat of it is given.
        notices : tuple of str
            What was said while the files were read.

        Returns
        -------
        int
            Number of the run, from 1.

        Raises
        ------
        UsageError
            If the archive was opened for reading only, or the parent does not exist.
        ArchiveProblem
            If the run cannot be written; what the archive held is untouched.
        """
        parents_identity = "" if parent is None else self.identity(parent)
        said = {
            "title": title,
            "time": datetime.now(UTC).isoformat(timespec="seconds"),
            "parent": parent,
            "parent_identity": parents_identity,
            "notices": list(notices),
            "versions": _versions(),
        }
        with self._changing() as file:
            number = max((int(name) for name in file["runs"]), default=0) + 1
            write_run(file, number, fit, job_text=job_text, origin=origin, said=said)
        return number

    def save_posterior(
        self, run: int, arrays: Mapping[str, object], *, units: Mapping[str, str] = MappingProxyType({})
    ) -> None:
        """Store samples with a run, in the place of any that are there.

        Parameters
        ----------
        run : int
        arrays : mapping from name to array of numbers, text, or sequence of texts
            Names are words of letters, digits and underscores.
        units : mapping from name to unit, optional
            "1" where none is given.

        Raises
        ------
        UsageError
            If there is no such run, or for a name or content of another kind.
        ArchiveProblem
            If they cannot be written; what the archive held is untouched.
        """
        self._group(run)
        with self._changing() as file:
            write_samples(file[f"runs/{run}"], arrays, units)

    def posterior(self, run: int) -> Mapping[str, Value]:
        """Arrays (float64, int64), texts and tuples of texts that were stored with a run, by name.

        Raises
        ------
        UsageError
            If there is no such run, or no samples are stored with it.
        ArchiveProblem
            If they have changed since they were stored.
        """
        group = self._group(run)
        with reading(self.path):
            if POSTERIOR not in group:
                raise UsageError(f"{self.path}: run {run} has no samples yet; make them with 'dunhamfit sample'")
            return read_samples(group[POSTERIOR])

    @property
    def file(self) -> Mapping[str, h5py.Group]:
        """The open file, for reading; empty before the first run is stored."""
        if self._closed:
            raise UsageError(f"{self.path}: the archive is closed; open it again")
        return {} if self._file is None else self._file

    def _open(self) -> None:
        with reading(self.path):
            self._file = open_current(self._real)

    def _shut(self) -> None:
        if self._file is not None:
            self._file.close()
            self._file = None

    def _group(self, run: int) -> h5py.Group:
        if run not in self.numbers():
            held = ", ".join(map(str, self.numbers())) or "none"
            raise UsageError(f"{self.path}: there is no run {run}; the archive holds runs {held}")
        with reading(self.path):
            return self.file[f"runs/{run}"]

    @contextmanager
    def _changing(self) -> Iterator[h5py.File]:
        """The archive open for changes, all of which take effect together when the block ends well."""
        if not self.appends:
            raise UsageError(f"{self.path}: the archive was opened for reading; open it with mode='a' to store into it")
        with writing(self.path), rewritten(self._real) as content:
            new = not content.getbuffer()
            with h5py.File(content, "w" if new else "r+", libver=HDF5_VERSIONS) as file:
                if new:
                    file.attrs.create("format", FORMAT, dtype=TEXT)
                    file.attrs.create("format_version", FORMAT_VERSION, dtype="<i8")
                    file.create_group("runs")
                bring_up_to_date(file, self.path)
                file.attrs.create("written_by", f"dunhamfit {_versions()['dunhamfit']}", dtype=TEXT)
                yield file
        self._shut()
        self._open()


def _versions() -> dict[str, str]:
    """Versions of the programs that decide about the numbers."""
    return {
        # The package is loaded, since this is a part of it; nothing here may import upwards.
        "dunhamfit": sys.modules["dunhamfit"].__version__,
        "python": platform.python_version(),
        "numpy": np.__version__,
        "scipy": scipy.__version__,
        "h5py": h5py.__version__,
        "hdf5": h5py.version.hdf5_version,
    }
