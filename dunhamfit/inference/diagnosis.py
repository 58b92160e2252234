"""What a wrong line may be: the slips of labelling and copying, each tried against a fit without the line.

Tried are P and R exchanged, the two J exchanged, J one too high or low, v one too high or low
(both levels, or one of them), the two v (or whole levels) exchanged, another isotopologue of the list, the
printed number read in another unit, and two neighbouring digits of it exchanged.

A remedy is proposed only where exactly one of them fits, to 4 sigma with the uncertainty of the
prediction. It is never applied. A line that is no more than some ten sigma off fits one thing or another by
chance (about 4/t of what is tried and moves it that far), so that below 50 sigma, or where
the list has the line already, what fits is only said to be possible.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np

from dunhamfit.fit.record import Fit
from dunhamfit.inference.studentised import predicted
from dunhamfit.lines.line_list import LineList, branch_label
from dunhamfit.units import UNITS, from_wavenumber, sigma_to_wavenumber, to_wavenumber

# A remedy must fit to this many sigma, and remove an error of so many of them to be proposed.
FITS, CLEAR = 4.0, 50.0
# Decimals that are looked for in a printed number, how many last places of a double it may miss by after a
# conversion of units, and how many its last decimal must be worth, for it to be no coincidence.
_MOST_DECIMALS, _LAST_PLACES, _WORTH = 12, 8.0, 1000.0


@dataclass(frozen=True)
class Remedy:
    """One slip that would explain a line.

    Attributes
    ----------
    kind : str
        "branch", "J exchanged", "J", "v", "v exchanged", "levels exchanged", "isotopologue", "unit" or "digits".
    reading : str
        What the line would be, such as `P(10)` or `44.8911029 THz`.
    fits : float
        How far it would then be off, in sigma.
    """

    kind: str
    reading: str
    fits: float


@dataclass(frozen=True)
class Diagnosis:
    """What is said of one line; nothing is changed.

    Attributes
    ----------
    text : str
    proposal : Remedy or None
        The one remedy that fits, where that cannot be chance.
    possible : tuple of Remedy
        All that fit.
    """

    text: str
    proposal: Remedy | None
    possible: tuple[Remedy, ...]


@dataclass(frozen=True)
class _Trial:
    kind: str
    isotopologue: int
    v_upper: int
    j_upper: int
    v_lower: int
    j_lower: int
    position: float
    sigma: float
    reading: str


def diagnose(fit: Fit, indices: Sequence[int], sigma: np.ndarray) -> tuple[Diagnosis, ...]:
    """Try every slip on some lines of a fit.

    Parameters
    ----------
    fit : Fit
        Made without these lines: they would have pulled it.
    indices : sequence of int
        Lines of `fit.lines`, of isotopologues that the model knows.
    sigma : ndarray of float, shape (n_lines,), cm-1
        Uncertainty of every line, noise factor included.

    Returns
    -------
    tuple of Diagnosis
        One a line.
    """
    lines = fit.lines
    known = [code for code, name in enumerate(lines.isotopologues) if fit.model.knows(name)]
    decimals = _Decimals(lines)
    trials, owner = [], []
    for number, index in enumerate(indices):
        for trial in _trials(lines, int(index), float(sigma[index]), known, decimals):
            trials.append(trial)
            owner.append(number)
    if not trials:
        return ()
    owner = np.array(owner)
    asked = _as_lines(lines, np.asarray(indices)[owner], trials)
    calculated, of_fit = predicted(fit, asked)
    off = asked.position - calculated
    total = np.hypot(asked.sigma, of_fit)
    z = np.abs(off) / total
    found = []
    for number, index in enumerate(indices):
        own = np.flatnonzero(owner == number)
        assigned, others = own[0], own[1:]
        size = abs(off[assigned])
        fitting = _fitting(trials, others[(z[others] < FITS) & (FITS * total[others] < size)], total)
        remedies = tuple(Remedy(trials[i].kind, trials[i].reading, float(z[i])) for i in fitting)
        clear = len(fitting) == 1 and size > CLEAR * total[fitting[0]]
        twin = _twin(fit, int(index), trials[fitting[0]]) if len(fitting) == 1 else None
        head = f"{lines.label(index)} is {off[assigned]:.4g} cm-1 ({_count(z[assigned])} sigma) off"
        found.append(_worded(head, remedies, clear=clear, twin=None if twin is None else lines.place(twin)))
    return tuple(found)


def _fitting(trials: list[_Trial], fitting: np.ndarray, total: np.ndarray) -> list[int]:
    """The trials that fit, one a reading: that of the smaller uncertainty."""
    best: dict[str, int] = {}
    for i in sorted(fitting, key=lambda i: -total[i]):
        best[trials[i].reading] = int(i)
    return list(best.values())


def _count(size: float) -> str:
    """`5.7`, `152`, `8e5`."""
    if size < 1e4:
        return f"{size:.3g}"
    power = int(np.floor(np.log10(size)))
    return f"{size / 10.0**power:.0f}e{power}"


def _worded(head: str, remedies: tuple[Remedy, ...], *, clear: bool, twin: str | None) -> Diagnosis:
    if not remedies:
        return Diagnosis(f"{head}; none of the usual slips explains it.", None, ())
    ways = [f"as {item.reading} it fits to {item.fits:.1f} sigma" for item in remedies]
    if len(remedies) > 1:
        return Diagnosis(f"{head}; {', '.join(ways)}: no remedy is proposed.", None, remedies)
    text = f"{head}; {ways[0]}"
    if twin is not None:
        text += f", but the list has that line already ({twin})"
    elif not clear:
        text += ", which may be chance at this size"
    proposal = remedies[0] if clear and twin is None else None
    return Diagnosis(f"{text}. Not changed; confirm.", proposal, remedies)


def _trials(lines: LineList, index: int, sigma: float, isotopologues: list[int], decimals: _Decimals) -> list[_Trial]:
    """The line as it stands, then every slip once."""
    position = float(lines.position[index])
    code = int(lines.isotopologue[index])
    stands = tuple(int(getattr(lines, name)[index]) for name in ("v_upper", "j_upper", "v_lower", "j_lower"))
    trials = [_Trial("", code, *stands, position, sigma, "")]
    seen = {(code, *stands)}
    slips = [(kind, code, *levels) for kind, *levels in _level_slips(*stands)]
    slips += [("isotopologue", other, *stands) for other in isotopologues]
    for kind, other, *levels in slips:
        v_upper, j_upper, v_lower, j_lower = levels
        if (other, *levels) in seen or min(levels) < 0:
            continue
        seen.add((other, *levels))
        reading = branch_label(j_upper, j_lower)
        if (v_upper, v_lower) != (stands[0], stands[2]):
            reading = f"{v_upper}-{v_lower} {reading}"
        if other != code:
            reading = f"{lines.isotopologues[other]} {reading}"
        trials.append(_Trial(kind, other, *levels, position, sigma, reading))
    unit = lines.sources[lines.source[index]].unit
    printed = float(from_wavenumber(position, unit))
    for other in UNITS:
        if other != unit and printed > 0:
            moved = float(to_wavenumber(printed, other))
            # The uncertainty may have been printed in the wrong unit too, or not.
            scaled = float(sigma_to_wavenumber(sigma * abs(printed / position), printed, other))
            reading = f"{printed:.10g} {other} (in place of {unit})"
            trials += [_Trial("unit", code, *stands, moved, each, reading) for each in (sigma, scaled)]
    for text in _exchanged_digits(decimals.printed(index, printed)):
        moved = float(to_wavenumber(float(text), unit)) if float(text) else position
        trials.append(_Trial("digits", code, *stands, moved, sigma, f"{text} {unit} (digits exchanged)"))
    return trials


def _level_slips(v_upper: int, j_upper: int, v_lower: int, j_lower: int) -> Iterator[tuple]:
    """Kind and levels (v', J', v'', J'') of every slip of quantum numbers, plausible ones first."""
    yield "branch", v_upper, 2 * j_lower - j_upper, v_lower, j_lower
    yield "J exchanged", v_upper, j_lower, v_lower, j_upper
    for step in (1, -1):
        yield "J", v_upper, j_upper + step, v_lower, j_lower + step
        yield "v", v_upper + step, j_upper, v_lower + step, j_lower
        if v_upper != v_lower:
            yield "v", v_upper + step, j_upper, v_lower, j_lower
            yield "v", v_upper, j_upper, v_lower + step, j_lower
    yield "v exchanged", v_lower, j_upper, v_upper, j_lower
    yield "levels exchanged", v_lower, j_lower, v_upper, j_upper


class _Decimals:
    """How many decimals the numbers of each source were printed with, in the unit of the source.

    The text is not kept, but a printed number is the shortest decimal number that reads back as its double.
    """

    def __init__(self, lines: LineList):
        self._lines = lines
        self._of_source: dict[int, int | None] = {}

    def printed(self, index: int, value: float) -> str:
        """The number of one line as it was printed; empty where it was not a short decimal number."""
        code = int(self._lines.source[index])
        if code not in self._of_source:
            own = self._lines.source == code
            values = from_wavenumber(self._lines.position[own], self._lines.sources[code].unit)
            found = _decimals(values)
            # Trailing zeros are lost with the text, so that the most decimals of a source are those of all.
            self._of_source[code] = None if np.median(found) > _MOST_DECIMALS else int(np.median(found))
        most = self._of_source[code]
        own = int(_decimals(np.array([value]))[0])
        if most is None or own > _MOST_DECIMALS:
            return ""
        return f"{value:.{max(most, own)}f}"


def _decimals(values: np.ndarray) -> np.ndarray:
    """Fewest decimals that give each value back; one more than the most looked for where none do."""
    found = np.full(values.shape, _MOST_DECIMALS + 1)
    for count in range(_MOST_DECIMALS, -1, -1):
        place = np.spacing(np.abs(values))
        miss = np.abs(np.round(values, count) - values)
        found[(miss <= _LAST_PLACES * place) & (0.1**count > _WORTH * place)] = count
    return found


def _exchanged_digits(text: str) -> Iterator[str]:
    """The number with each pair of neighbouring digits exchanged, across the decimal point too."""
    places = [i for i, letter in enumerate(text) if letter.isdigit()]
    for first, second in pairwise(places):
        if text[first] != text[second]:
            letters = list(text)
            letters[first], letters[second] = letters[second], letters[first]
            yield "".join(letters)


def _as_lines(lines: LineList, owner: np.ndarray, trials: list[_Trial]) -> LineList:
    columns = ("isotopologue", "v_upper", "j_upper", "v_lower", "j_lower", "position", "sigma")
    return replace(
        lines.subset(owner), **{name: np.array([getattr(trial, name) for trial in trials]) for name in columns}
    )


def _twin(fit: Fit, index: int, trial: _Trial) -> int | None:
    """A used line of the same source that is the transition of the trial already."""
    lines = fit.lines
    if trial.kind in ("unit", "digits"):
        return None
    same = lines.used & (lines.source == lines.source[index])
    for name in ("isotopologue", "v_upper", "j_upper", "v_lower", "j_lower"):
        same &= getattr(lines, name) == getattr(trial, name)
    found = np.flatnonzero(same)
    return int(found[0]) if len(found) else None
