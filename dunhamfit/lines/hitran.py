"""HITRAN 160-character records of diatomic molecules, read by column.

Columns (from 1) after Rothman et al., J. Quant. Spectrosc. Radiat. Transf. 96, 139
(2005): molecule 1-2, isotopologue 3, position 4-15, upper and lower vibrational quanta
68-82 and 83-97 (v right-aligned and alone for closed-shell diatomic molecules), local
quanta of the lower level 113-127 (branch letter in 118, J'' in 119-121), six
uncertainty codes 128-133 of which the first is that of the position.

The code of the position names a decade, not a sigma (the same paper): code n stands for
10^-n to 10^(1-n) cm-1, and code 0 for 1 cm-1 or more, or unreported. The upper end of
the decade is taken as sigma, and a notice says so.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from dunhamfit.lines.faults import Fault, faults_where, visible
from dunhamfit.lines.notation import branch_step
from dunhamfit.lines.numbering import name_codes, reason_left_out
from dunhamfit.lines.request import SourceRequest
from dunhamfit.lines.rows import FileRows, no_rows

LENGTH = 160
_MOLECULE, _CODE, _POSITION = slice(0, 2), slice(2, 3), slice(3, 15)
_V_UPPER, _V_LOWER = slice(67, 82), slice(82, 97)
_BRANCH, _J_LOWER, _ERROR = slice(117, 118), slice(118, 121), slice(127, 128)
_BLANK, _ZERO = ord(" "), ord("0")

# Upper ends of the decades of code 0 (which states none) to 9, cm-1; written out: 10.0**-n is not exact.
DECADES = np.array([np.nan, 1.0, 1e-1, 1e-2, 1e-3, 1e-4, 1e-5, 1e-6, 1e-7, 1e-8])


def read_hitran(data: bytes, shown: str, request: SourceRequest) -> FileRows:
    """The records of one file.

    Parameters
    ----------
    data : bytes
        The whole file.
    shown : str
        The file as the user named it.
    """
    if b"\0" in data:
        what, why = "the file is not text: it holds zero bytes", "records of 160 characters were expected"
        return no_rows(shown, [Fault(shown, 0, what, why, "check which file was meant")])
    data = data.removeprefix(b"\xef\xbb\xbf")  # A byte-order mark that an editor left.
    texts = data.splitlines()
    length = np.fromiter(map(len, texts), dtype=int, count=len(texts))
    filled = np.array([not text.isspace() and text != b"" for text in texts], dtype=bool)
    whole = filled & (length == LENGTH)
    number = np.arange(1, len(texts) + 1)

    def describe(index: int) -> tuple[str, str, str]:
        text = visible(texts[index].decode("latin-1"))
        why = f'HITRAN records are read by column and the text is "{text}"'
        characters = "1 character" if length[index] == 1 else f"{length[index]} characters"
        return f"{characters}, expected {LENGTH}", why, "restore the record or remove it"

    faults = faults_where(shown, number, filled & ~whole, describe)
    count = int(filled.sum())
    if not whole.any():
        return no_rows(shown, faults, count=count)
    joined = data if whole.all() else b"\n".join(texts[index] for index in np.flatnonzero(whole))
    records = np.frombuffer(joined.replace(b"\r", b"").replace(b"\n", b""), dtype=np.uint8)
    return _Records(records.reshape(-1, LENGTH), number[whole], faults, shown, request).rows(count)


class _Records:
    """The records of one file while they are read; collects faults, notices and which rows are readable."""

    def __init__(self, records: np.ndarray, row: np.ndarray, faults: list[Fault], shown: str, request: SourceRequest):
        self.records = records
        self.row = row
        self.shown = shown
        self.request = request
        self.readable = np.ones(len(row), dtype=bool)
        self.faults = faults
        self.notices: list[str] = []

    def rows(self, count: int) -> FileRows:
        """Read every column; `count` is the number of rows in the file, whole or not."""
        molecule = self._column("molecule", _MOLECULE, _whole_numbers, "the molecule number")
        code = self._column("isotopologue", _CODE, _isotopologue_codes, "the isotopologue code")
        position = self._column("position", _POSITION, _fixed_point, "a position in cm-1")
        alone = "v alone for a closed-shell diatomic molecule"
        v_upper = self._column("v'", _V_UPPER, _whole_numbers, alone)
        v_lower = self._column("v''", _V_LOWER, _whole_numbers, alone)
        step = self._column("branch", _BRANCH, _branch_steps, "the branch letter")
        j_lower = self._column("J''", _J_LOWER, _whole_numbers, "J''")
        error = self._column("uncertainty code", _ERROR, _whole_numbers, "a digit")
        names, reasons, isotopologue = self._name(molecule, code)
        chosen = np.array([reason == "" for reason in reasons] or [False])[isotopologue]
        sigma = self._sigma(error, chosen)
        return FileRows(
            shown=self.shown,
            count=count,
            row=self.row,
            position=position,
            uncertainty=sigma,
            v_upper=v_upper,
            j_upper=j_lower + step,
            v_lower=v_lower,
            j_lower=j_lower,
            isotopologue=isotopologue,
            readable=self.readable,
            names=names,
            reasons=reasons,
            by_branch=True,
            faults=tuple(self.faults),
            notices=tuple(self.notices),
        )

    def _refuse(self, mask: np.ndarray, describe: Callable[[int], tuple[str, str, str]]) -> None:
        self.faults.extend(faults_where(self.shown, self.row, mask, describe))
        self.readable &= ~mask

    def _refuse_file(self, problem: tuple[str, ...]) -> None:
        self.faults.append(Fault(self.shown, 0, *problem))
        self.readable[:] = False

    def _column(self, name: str, field: slice, parse: Callable[[np.ndarray], np.ndarray], holds: str) -> np.ndarray:
        """One field of every record as numbers, with a fault for each that `parse` left NaN."""
        values = parse(self.records[:, field])
        first, last = field.start + 1, field.stop
        place = f"column {first} holds" if first == last else f"columns {first}-{last} hold"

        def describe(index: int) -> tuple[str, str, str]:
            text = visible(self.records[index, field].tobytes().decode("latin-1"))
            return f'{name} "{text}" cannot be read', f"{place} {holds}", "restore the record or remove it"

        self._refuse(np.isnan(values), describe)
        return values

    def _sigma(self, error: np.ndarray, chosen: np.ndarray) -> np.ndarray:
        """Sigma of each record in cm-1; a notice says where that of the chosen ones comes from."""
        code = np.nan_to_num(error, nan=0.0).astype(int)
        stated = self.request.uncertainty
        sigma = DECADES[code]
        unstated = (error == 0) & self.readable
        if stated is not None:
            sigma[unstated] = stated
        else:
            what, why = "uncertainty code 0 states no value", "it means 1 cm-1 or more, or unreported"
            self._refuse(unstated, lambda _: (what, why, "set uncertainty for the source"))
        said = []
        for number, lines in enumerate(np.bincount(code[self.readable & chosen]).tolist()):
            if lines:
                origin = f"{DECADES[number]:g} cm-1" if number else f"{stated:g} cm-1 as the source states"
                said.append(f"code {number}: {origin} ({_lines(lines)})")
        if said:
            head = "HITRAN uncertainty codes name decades; the upper end is taken as sigma"
            self.notices.append(f"{self.shown}: {head}: {', '.join(said)}")
        return sigma

    def _name(self, molecule: np.ndarray, code: np.ndarray) -> tuple[tuple[str, ...], tuple[str, ...], np.ndarray]:
        """Names of the isotopologues, why some are left out, and the index of each record."""
        index = np.full(len(self.row), -1)
        molecules = np.unique(molecule[self.readable]).astype(int).tolist()
        if len(molecules) > 1:
            what = f"the file holds molecules {', '.join(map(str, molecules))}"
            self._refuse_file((what, "a source holds one molecule", "split the file"))
        if not self.readable.any():
            return (), (), index
        wanted = self.request.isotopologue
        codes = np.unique(code[self.readable]).astype(int).tolist()
        naming = name_codes(molecules[0], codes, wanted)
        if naming.problem:
            self._refuse_file(naming.problem)
            return (), (), index
        every = naming.names | naming.left_out
        why = f"the published numbering of molecule {molecules[0]} does not hold it"
        remedy = 'give a table such as isotopologue = {1 = "28Si32S"}'
        self._refuse(
            self.readable & ~np.isin(code, list(every)),
            lambda at: (f"isotopologue code {code[at]:.0f} is not known", why, remedy),
        )
        reasons = []
        for place, number in enumerate(every):
            mine = code == number
            index[mine] = place
            reasons.append(reason_left_out(number, wanted) if number in naming.left_out else "")
            if reasons[-1]:
                lines = _lines(int((mine & self.readable).sum()))
                self.notices.append(f"{self.shown}: {lines} left out: {reasons[-1]}")
        return tuple(every.values()), tuple(reasons), index


def _lines(number: int) -> str:
    return "1 line" if number == 1 else f"{number} lines"


def _whole_numbers(field: np.ndarray) -> np.ndarray:
    """Right-aligned whole numbers of a field, shape (n, width); NaN where there is none."""
    is_digit = (field >= _ZERO) & (field <= _ZERO + 9)
    right = is_digit[:, -1] & (is_digit | (field == _BLANK)).all(axis=1)
    right &= ~(is_digit[:, :-1] & ~is_digit[:, 1:]).any(axis=1)
    value = np.zeros(len(field))
    for column in range(field.shape[1]):
        value = np.where(is_digit[:, column], 10 * value + (field[:, column] - float(_ZERO)), value)
    return np.where(right, value, np.nan)


def _fixed_point(field: np.ndarray) -> np.ndarray:
    """Decimal numbers of a field, shape (n, width); NaN where there is none."""
    texts = np.ascontiguousarray(field).view(f"S{field.shape[1]}")[:, 0]
    allowed = np.zeros(256, dtype=bool)
    allowed[list(b" +-.0123456789")] = True
    plain = np.flatnonzero(allowed[field].all(axis=1))
    value = np.full(len(texts), np.nan)
    try:
        value[plain] = texts[plain].astype(float)
    except ValueError:
        for index in plain:
            try:
                value[index] = float(texts[index])
            except ValueError:
                continue
    return value


def _branch_steps(field: np.ndarray) -> np.ndarray:
    return np.array([branch_step(chr(letter)) for letter in range(256)])[field[:, 0]]


def _isotopologue_codes(field: np.ndarray) -> np.ndarray:
    """The one-character codes as numbers: 1 to 9, 0 for 10, A, B, ... for 11, 12, ...; NaN if none."""
    table = np.full(256, np.nan)
    table[_ZERO] = 10
    table[np.arange(_ZERO + 1, _ZERO + 10)] = np.arange(1, 10)
    table[np.arange(ord("A"), ord("Z") + 1)] = np.arange(11, 37)
    return table[field[:, 0]]
