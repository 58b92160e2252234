"""Printed line lists of an invented molecule with slips of labelling and copying planted into them.

The molecule is that of `tests.reference.thirteen_terms` (nothing here was measured), scaled to other
isotopologues with rho^(k + 2 l) (J. L. Dunham, Phys. Rev. 41, 721 (1932)), without the code under test.
Masses: AME2020, M. Wang et al., Chin. Phys. C 45, 030003 (2021).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from dunhamfit.lines.line_list import LineList, Source, branch_label
from tests.reference.thirteen_terms import TRUTH

MASSES = {"28Si": 27.97692653442, "29Si": 28.97649466434, "30Si": 29.973770137, "32S": 31.97207117354,
          "34S": 33.967867011}  # fmt: skip
ISOTOPOLOGUES = ("28Si32S", "29Si32S", "28Si34S", "30Si32S")
MHZ = 29979.2458  # per cm-1, by the definition of the metre
PER_WAVENUMBER = {"cm-1": 1.0, "THz": MHZ / 1e6, "GHz": MHZ / 1e3, "MHz": MHZ}
# name, unit, decimals, sigma in that unit, bands, isotopologues, highest J
SOURCES = (
    ("millimetre", "MHz", 3, 0.02, ((0, 0), (1, 1), (2, 2)), (0, 1, 2), 20),
    ("furnace", "cm-1", 5, 1e-4, ((1, 0), (2, 1), (3, 2), (4, 3)), (0, 1, 2, 3), 50),
    ("laser", "THz", 7, 1.2e-6, ((2, 0), (3, 1)), (0,), 40),
)
KINDS = ("branch", "J exchanged", "J", "v", "isotopologue", "unit", "digits")


def energy(code, v, j):
    """Term value of isotopologue number `code` in cm-1."""
    mass = np.array([[MASSES[name[:4]], MASSES[name[4:]]] for name in ISOTOPOLOGUES])
    reduced = mass.prod(axis=1) / mass.sum(axis=1)
    rho = np.sqrt(reduced[0] / reduced)[code]
    return sum(rho ** (k + 2 * l) * value * (v + 0.5) ** k * (j * (j + 1.0)) ** l for (k, l), value in TRUTH.items())


def printed(position: np.ndarray, source: np.ndarray) -> np.ndarray:
    """Positions in cm-1 rounded as their sources print them."""
    rounded = np.empty_like(position)
    for code, (_, unit, decimals, *_) in enumerate(SOURCES):
        own = source == code
        rounded[own] = np.round(position[own] * PER_WAVENUMBER[unit], decimals) / PER_WAVENUMBER[unit]
    return rounded


def clean_lines(rng: np.random.Generator) -> LineList:
    """All lines with normal noise of the stated size, printed with the decimals of their source."""
    rows = [
        (number, code, upper, lower, j + step, j)
        for number, (_, _, _, _, bands, codes, j_max) in enumerate(SOURCES)
        for code in codes
        for upper, lower in bands
        for j in range(j_max + 1)
        for step in ((1,) if upper == lower else (1, -1))
        if j + step >= 0
    ]
    source, code, v_upper, v_lower, j_upper, j_lower = np.array(rows).T
    sigma = np.array([item[3] / PER_WAVENUMBER[item[1]] for item in SOURCES])[source]
    true = energy(code, v_upper, j_upper) - energy(code, v_lower, j_lower)
    position = printed(true + sigma * rng.standard_normal(len(true)), source)
    return LineList(
        position=position,
        sigma=sigma,
        v_upper=v_upper,
        j_upper=j_upper,
        v_lower=v_lower,
        j_lower=j_lower,
        isotopologue=code,
        source=source,
        file=np.zeros(len(true)),
        row=np.arange(1, len(true) + 1),
        exclusion=np.zeros(len(true)),
        isotopologues=ISOTOPOLOGUES,
        sources=tuple(Source(name, unit=unit) for name, unit, *_ in SOURCES),
    )


@dataclass(frozen=True)
class Slip:
    """One planted slip: which line, what was done, and the reading that undoes it (empty for a unit)."""

    index: int
    kind: str
    reading: str


def plant(lines: LineList, kind: str, rng: np.random.Generator) -> tuple[LineList, Slip]:
    """The list with one slip of that kind in a line chosen at random, at least 100 sigma in size."""
    while True:
        index = int(rng.integers(len(lines)))
        changed = _changed(lines, index, kind, rng)
        if changed is None:
            continue
        columns, reading = changed
        wrong = lines
        for name, value in columns.items():
            column = getattr(wrong, name).copy()
            column[index] = value
            wrong = replace(wrong, **{name: column})
        if abs(wrong.position[index] - _true(wrong, index)) > 100 * lines.sigma[index]:
            return wrong, Slip(index, kind, reading)


def _true(lines: LineList, index: int) -> float:
    code, v_upper, j_upper, v_lower, j_lower = (
        int(getattr(lines, name)[index]) for name in ("isotopologue", "v_upper", "j_upper", "v_lower", "j_lower")
    )
    return energy(code, v_upper, j_upper) - energy(code, v_lower, j_lower)


def _changed(lines: LineList, index: int, kind: str, rng: np.random.Generator):
    """Columns of the line as it is printed wrongly, and the reading that undoes that; None if it cannot be."""
    v_upper, j_upper, v_lower, j_lower = (
        int(getattr(lines, name)[index]) for name in ("v_upper", "j_upper", "v_lower", "j_lower")
    )
    label, rotation = branch_label(j_upper, j_lower), v_upper == v_lower
    step = int(rng.choice([1, -1]))
    if kind == "branch" and not rotation and j_lower > 0:
        return {"j_upper": 2 * j_lower - j_upper}, label
    if kind == "J exchanged" and not rotation:
        return {"j_upper": j_lower, "j_lower": j_upper}, label
    if kind == "J" and min(j_upper, j_lower) + step >= 0:
        return {"j_upper": j_upper + step, "j_lower": j_lower + step}, label
    if kind == "v" and min(v_upper, v_lower) + step >= 0:
        if not rotation and rng.random() < 0.3:
            return {"v_upper": v_upper + 1}, f"{v_upper}-{v_lower} {label}"
        return {"v_upper": v_upper + step, "v_lower": v_lower + step}, f"{v_upper}-{v_lower} {label}"
    if kind == "isotopologue":
        code = int(lines.isotopologue[index])
        other = int(rng.choice([item for item in range(len(ISOTOPOLOGUES)) if item != code]))
        return {"isotopologue": other}, f"{ISOTOPOLOGUES[code]} {label}"
    if kind == "unit":
        own = SOURCES[lines.source[index]][1]
        other = str(rng.choice([unit for unit in PER_WAVENUMBER if unit != own]))
        return {"position": lines.position[index] * PER_WAVENUMBER[other] / PER_WAVENUMBER[own]}, ""
    if kind == "digits":
        return _digits_exchanged(lines, index, rng)
    return None


def _digits_exchanged(lines: LineList, index: int, rng: np.random.Generator):
    _, unit, decimals, *_ = SOURCES[lines.source[index]]
    text = f"{lines.position[index] * PER_WAVENUMBER[unit]:.{decimals}f}"
    places = [i for i, letter in enumerate(text) if letter != "."]
    pick = int(rng.integers(len(places) - 1))
    first, second = places[pick], places[pick + 1]
    letters = list(text)
    letters[first], letters[second] = letters[second], letters[first]
    if letters[0] == "0":  # nobody prints that
        return None
    return {"position": float("".join(letters)) / PER_WAVENUMBER[unit]}, f"{text} {unit}"
