"""Blocks of samples beside the archive while a chain runs, so that a killed process loses one block at the most.

A block is one file of arrays, written under another name and renamed when it is whole; the
archive itself is written once, at the end.
"""

from __future__ import annotations

import os
import shutil
from collections.abc import Mapping
from pathlib import Path

import numpy as np

from dunhamfit.archive.problems import reading, writing


class SideFile:
    """The blocks of one run's chain, in a folder beside the archive.

    Attributes
    ----------
    folder : Path
    """

    def __init__(self, archive: Path, run: int):
        self.folder = archive.with_name(f"{archive.name}.run{run}.samples")

    def add(self, block: Mapping[str, object]) -> None:
        """Append one block.

        Parameters
        ----------
        block : mapping from name to array, text or sequence of texts

        Raises
        ------
        ArchiveProblem
            If it cannot be written.
        """
        with writing(self.folder):
            self.folder.mkdir(exist_ok=True)
            target = self.folder / f"{len(self._names()) + 1:06d}.npz"
            fresh = target.with_suffix(".part")
            with open(fresh, "wb") as file:
                np.savez(file, **{name: np.asarray(value) for name, value in block.items()})
                file.flush()
                os.fsync(file.fileno())
            os.replace(fresh, target)

    def blocks(self) -> list[dict[str, np.ndarray]]:
        """Every whole block, in order; empty where there is none.

        Raises
        ------
        ArchiveProblem
            If one cannot be read.
        """
        found = []
        with reading(self.folder):
            for name in self._names():
                with np.load(self.folder / name, allow_pickle=False) as block:
                    found.append(dict(block))
        return found

    def remove(self) -> None:
        """Take the folder away, once the archive holds its blocks."""
        shutil.rmtree(self.folder, ignore_errors=True)

    def _names(self) -> list[str]:
        if not self.folder.is_dir():
            return []
        return sorted(path.name for path in self.folder.glob("*.npz"))
