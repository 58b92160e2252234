"""What to read: one source as the job file or the caller declares it, checked before any file is opened."""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path

from dunhamfit.errors import UsageError
from dunhamfit.lines.choice import parse_choice
from dunhamfit.units import check_unit

# A check takes the name of an isotopologue and returns it as it should be written, or raises UsageError.
IsotopologueCheck = Callable[[str], str]

FORMATS = ("delimited", "hitran")
COLUMNS = (
    "position",
    "uncertainty",
    "v_upper",
    "v_lower",
    "j_upper",
    "j_lower",
    "branch",
    "label",
    "m",
    "isotopologue",
)
# The ways to give J, in the order in which a header without a column map is searched.
J_FORMS = (("j_upper", "j_lower"), ("branch", "j_lower"), ("label",), ("m",))
_BAND = re.compile(r"\d{1,3}-\d{1,3}")
DELIMITERS = {"comma": ",", "tab": "\t", "semicolon": ";", "blanks": " "}


@dataclass(frozen=True)
class SourceRequest:
    """One source to be read.

    Attributes
    ----------
    name : str
    files : tuple of Path
    shown : tuple of str
        The files as the user named them; by default `files` as text.
    format : "delimited" or "hitran"
    isotopologue : str, dict of int to str, or None
        Of all lines; for "hitran" also a table from isotopologue codes to names, or None for all
        isotopologues of a molecule whose published numbering is known.
    columns : dict of str to (str or int), or None
        From the names in `COLUMNS` to header names or column numbers from 1; None takes the header's.
    band : str or None
        Such as "1-0", for tables of one band without columns for v.
    unit : str
        Of positions and uncertainties, one of `dunhamfit.units.UNITS`.
    uncertainty : float or None, in `unit`
        For lines without their own.
    coverage_factor : float or None
        k of the uncertainties; None is read as 1 and said in a notice.
    offset : float or None, in `unit`
        1 sigma of a shared offset; infinite for a free one.
    scale : float or None, fraction
        1 sigma of a shared fractional error; infinite for a free one.
    use : str or None
        Which lines to use, such as `v_upper <= 5` (`dunhamfit.lines.choice`).
    decimal : "." or ","
    delimiter : str or None
        One of `DELIMITERS`, by name or as the character; None guesses.
    header : bool or None
        Whether the first row names the columns; None guesses.
    comment : tuple of str
        A line that starts with one of these is no row.
    repeats : "refuse" or "both"
        What to do with two values of one line in this source.
    allow_high_j : bool
        Whether J above 250 is meant.

    Raises
    ------
    UsageError
        If any of this asks for what does not exist.
    """

    name: str
    files: tuple[Path, ...]
    shown: tuple[str, ...] = ()
    format: str = "delimited"
    isotopologue: str | Mapping[int, str] | None = None
    columns: Mapping[str, str | int] | None = None
    band: str | None = None
    unit: str = "cm-1"
    uncertainty: float | None = None
    coverage_factor: float | None = None
    offset: float | None = None
    scale: float | None = None
    use: str | None = None
    decimal: str = "."
    delimiter: str | None = None
    header: bool | None = None
    comment: tuple[str, ...] = ("#", "!")
    repeats: str = "refuse"
    allow_high_j: bool = False

    def __post_init__(self):
        files = tuple(Path(file) for file in self.files)
        if not files:
            raise UsageError(f"source '{self.name}': no file is given")
        object.__setattr__(self, "files", files)
        object.__setattr__(self, "shown", tuple(self.shown) or tuple(str(file) for file in files))
        object.__setattr__(self, "comment", tuple(mark for mark in self.comment if mark))
        if len(self.shown) != len(files):
            raise UsageError(f"source '{self.name}': 'shown' must name {len(files)} files (got {len(self.shown)})")
        self._check_words()
        self._check_numbers()
        self._check_columns()
        self._check_band()
        self._check_isotopologue()
        if self.use is not None:
            parse_choice(self.use)

    def _refuse(self, option: str, expected: str, got) -> None:
        raise UsageError(f"source '{self.name}': '{option}' must be {expected} (got {got!r})")

    def _check_words(self) -> None:
        check_unit(self.unit)
        for option, known in (("format", FORMATS), ("decimal", (".", ",")), ("repeats", ("refuse", "both"))):
            if getattr(self, option) not in known:
                self._refuse(option, " or ".join(f'"{word}"' for word in known), getattr(self, option))
        if self.delimiter is not None:
            character = DELIMITERS.get(self.delimiter, self.delimiter)
            if character not in DELIMITERS.values():
                self._refuse("delimiter", "one of " + ", ".join(DELIMITERS), self.delimiter)
            if character == self.decimal:
                self._refuse("delimiter", "another character than the decimal sign", self.delimiter)
            object.__setattr__(self, "delimiter", character)
        if self.format == "hitran" and self.unit != "cm-1":
            self._refuse("unit", '"cm-1" for HITRAN records, which hold nothing else,', self.unit)

    def _check_numbers(self) -> None:
        for option in ("uncertainty", "coverage_factor", "offset", "scale"):
            value = getattr(self, option)
            if value is None:
                continue
            if isinstance(value, bool) or not isinstance(value, (int, float)) or not value > 0:
                self._refuse(option, "a positive number", value)
            if math.isinf(value) and option in ("uncertainty", "coverage_factor"):
                self._refuse(option, "a finite number", value)
        if self.unit == "um" and self.offset is not None and math.isfinite(self.offset):
            raise UsageError(
                f"source '{self.name}': an offset in um differs from line to line in cm-1; "
                "state the shared error of wavelengths as 'scale'"
            )

    def _check_columns(self) -> None:
        if self.columns is None:
            return
        if self.format == "hitran":
            fixed = "left out for HITRAN records, whose columns are fixed,"
            self._refuse("columns", fixed, dict(self.columns))
        for key, column in self.columns.items():
            if key not in COLUMNS:
                raise UsageError(f"source '{self.name}': '{key}' is no column; use some of {', '.join(COLUMNS)}")
            is_number = isinstance(column, int) and not isinstance(column, bool) and column >= 1
            if not is_number and not (isinstance(column, str) and column):
                self._refuse(f"columns.{key}", "a header name or a column number from 1", column)
        given = [form for form in J_FORMS if set(form) <= set(self.columns)]
        if len(given) > 1:
            ways = " and as ".join(" with ".join(form) for form in given)
            raise UsageError(f"source '{self.name}': 'columns' gives J twice, as {ways}; keep one")

    def _check_band(self) -> None:
        if self.band is None:
            return
        if self.format == "hitran":
            self._refuse("band", "left out for HITRAN records, which name the band of each line,", self.band)
        if not isinstance(self.band, str) or not _BAND.fullmatch(self.band):
            self._refuse("band", 'v\' and v\'\' such as "1-0"', self.band)
        if {"v_upper", "v_lower"} & set(self.columns or {}):
            raise UsageError(f"source '{self.name}': 'band' and 'columns' both give v; keep one")

    @property
    def levels(self) -> tuple[int, int] | None:
        """v' and v'' of `band`, None where the columns give them."""
        return None if self.band is None else tuple(int(v) for v in self.band.split("-"))

    def _check_isotopologue(self) -> None:
        table = self.isotopologue
        if table is None or (isinstance(table, str) and table):
            return
        if not isinstance(table, Mapping) or not table:
            expected = 'a name, or for HITRAN records a table such as {1 = "28Si32S"}'
            self._refuse("isotopologue", expected, table)
        if self.format != "hitran":
            raise UsageError(
                f"source '{self.name}': a table of isotopologue codes serves HITRAN records only; "
                "name the isotopologue or map a column to it"
            )
        # The keys of a TOML table are text.
        if not all(str(code).isdecimal() and isinstance(name, str) and name for code, name in table.items()):
            self._refuse("isotopologue", "a table from code numbers to names", dict(table))
        object.__setattr__(self, "isotopologue", {int(code): name for code, name in table.items()})
