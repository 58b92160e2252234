"""Lines that are read when they are first looked at: an old list of a million costs nothing until then."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np

from dunhamfit.lines.line_list import LineList, line_columns, merge


@dataclass(frozen=True, eq=False)
class Part:
    """A stretch of lines of one source that are read when they are needed.

    Attributes
    ----------
    source : int
        Code of the source in the whole list.
    count : int
    read : callable without arguments
        Gives every column by name, shape (count,), with the codes of the whole list.
    key : object
        By which the place that holds the lines knows them; None for lines it has never seen.
    """

    source: int
    count: int
    read: Callable[[], Mapping[str, np.ndarray]]
    key: object = None


class DeferredLines(LineList):
    """A LineList made of parts; all columns are read when the first of them is asked for.

    Attributes
    ----------
    parts : tuple of Part
        Empty for a list derived from this one (`subset`, `excluded`), which holds its columns itself.
    """

    parts: tuple[Part, ...] = ()

    @classmethod
    def of(cls, parts, *, isotopologues, sources, reasons) -> DeferredLines:
        """Lines of `parts`, in their order; the names are those of LineList."""
        lines = cls.__new__(cls)
        # The columns stay unset, so that __getattr__ is called for the first of them.
        for name, value in (
            ("parts", tuple(parts)),
            ("isotopologues", tuple(isotopologues)),
            ("sources", tuple(sources)),
            ("reasons", tuple(reasons)),
        ):
            object.__setattr__(lines, name, value)
        return lines

    def __len__(self) -> int:
        return sum(part.count for part in self.parts) if self.parts else super().__len__()

    def __getattr__(self, name: str):
        if name not in {item.name for item in line_columns()}:
            raise AttributeError(f"'{type(self).__name__}' object has no attribute '{name}'")
        pieces = [part.read() for part in self.parts]
        for item in line_columns():
            found = [np.asarray(piece[item.name], dtype=item.metadata["dtype"]) for piece in pieces]
            column = np.concatenate(found) if found else np.empty(0, dtype=item.metadata["dtype"])
            column.flags.writeable = False
            object.__setattr__(self, item.name, column)
        return self.__dict__[name]


def append_lines(old: LineList, new: LineList) -> LineList:
    """`new` after `old`, codes of `old` kept, without reading lines of `old` that are still deferred.

    Lines of one source in `new` are put together; otherwise the result is that of `merge`.

    Raises
    ------
    UsageError
        If two different sources bear the same name.
    """
    if not getattr(old, "parts", ()):
        return merge([old, new])
    nothing = LineList(
        **{item.name: np.empty(0) for item in line_columns()},
        isotopologues=old.isotopologues,
        sources=old.sources,
        reasons=old.reasons,
    )
    recoded = merge([nothing, new])
    codes = np.unique(recoded.source)
    return DeferredLines.of(
        (*old.parts, *(part_of(recoded.subset(recoded.source == code), int(code)) for code in codes)),
        isotopologues=recoded.isotopologues,
        sources=recoded.sources,
        reasons=recoded.reasons,
    )


def part_of(lines: LineList, source: int) -> Part:
    """Lines at hand, all of one source, as a part."""
    columns = {item.name: getattr(lines, item.name) for item in line_columns()}
    return Part(source, len(lines), lambda: columns)
