"""Write the invented example campaign: silicon monosulfide, three sources, one later band, and the truth.

Nothing here was measured, and no constant comes from a paper: they are round numbers of a
plausible size. The script computes every line from its own formula and never imports
dunhamfit, so that the files are an outside check of it. The same files come out on every run.

    python examples/make_campaign.py [FOLDER]      (default: dunhamfit/examples beside this folder)

Equations, with x = v + 1/2, y = J (J + 1), rho = sqrt(mu_0 / mu_a) and M_A the mass of atom A:

    E_a(v, J) = sum_kl rho^(k + 2 l) [Y_kl + sum_A d_kl^A (M_A(0) / M_A(a) - 1)] x^k y^l
    listed    = (E_upper - E_lower) (1 + scale) + noise factor * stated sigma * N(0, 1)
"""

from __future__ import annotations

import json
import sys
from pathlib import Path
from typing import NamedTuple

import numpy as np

SEED = 20260214
DEFAULT_FOLDER = Path(__file__).resolve().parents[1] / "dunhamfit" / "examples"

# Atomic masses in u. AME2020: M. Wang et al., Chin. Phys. C 45, 030003 (2021).
MASSES = {
    "28Si": 27.97692653442,
    "29Si": 28.97649466434,
    "30Si": 29.973770137,
    "32S": 31.97207117354,
    "34S": 33.967867011,
}
ATOMS = {
    "28Si32S": ("28Si", "32S"),
    "29Si32S": ("29Si", "32S"),
    "30Si32S": ("30Si", "32S"),
    "28Si34S": ("28Si", "34S"),
}
REFERENCE = "28Si32S"

# The invented truth, cm-1.
TERMS = {
    (1, 0): 760.0, (2, 0): -2.7, (3, 0): 4.0e-3, (4, 0): -3.0e-5,
    (0, 1): 0.31, (1, 1): -1.5e-3, (2, 1): -1.2e-6, (3, 1): 8.0e-9,
    (0, 2): -2.1e-7, (1, 2): -4.0e-10, (2, 2): -3.0e-12,
    (0, 3): -2.0e-14, (1, 3): -1.0e-15,
}  # fmt: skip
BREAKDOWN = {
    "Si": {(1, 0): 0.018, (0, 1): -8.0e-6},
    "S": {(1, 0): 0.009, (0, 1): -1.1e-5},
}
NOISE_FACTORS = {"millimetre": 1.0, "furnace": 1.6, "laser": 1.0, "later-furnace": 1.0}
SCALE_PRIOR = 5e-8  # what the furnace laboratory states; the true scale error is drawn from it

# How the sources print: 1 MHz, 1 THz in cm-1 (by the definition of the metre), and stated uncertainties.
MHZ = 1 / 29979.2458
THZ = 1e6 * MHZ
MILLIMETRE_UNCERTAINTY = 0.04  # MHz, at k = 2
DISPLACEMENT = 0.004  # cm-1, of the displaced furnace line

INVENTED = "# Invented data, written by examples/make_campaign.py: nothing here was measured."

JOB = """\
title = "Invented silicon monosulfide campaign"

[molecule]
reference = "28Si32S"

[[source]]
name = "millimetre"
file = "millimetre.csv"
format = "delimited"
columns = {{ isotopologue = "isotopologue", v_upper = "v", v_lower = "v", j_upper = "J1", j_lower = "J0", \
position = "MHz" }}
unit = "MHz"
uncertainty = {millimetre_uncertainty}
coverage_factor = 2

[[source]]
name = "furnace"
file = "furnace.csv"
format = "delimited"
columns = {{ isotopologue = "iso", v_upper = "v1", v_lower = "v0", branch = "br", j_lower = "J", \
position = "nu", uncertainty = "unc" }}
unit = "cm-1"
coverage_factor = 1
scale = {scale_prior}

[[source]]
name = "laser"
file = "laser.txt"
format = "delimited"
isotopologue = "28Si32S"
columns = {{ v_upper = "v1", v_lower = "v0", label = "line", position = "THz" }}
unit = "THz"
coverage_factor = 1

[[exclude]]
source = "furnace"
rows = [{displaced}]
reason = "combination differences miss by 0.004 cm-1"

[[exclude]]
source = "furnace"
rows = [{mislabelled}]
reason = "position is that of the line before: label one too high"

[model]
terms = [4, 3, 2, 1]
breakdown = {{ Si = ["10", "01"], S = ["10", "01"] }}

[errors]
policy = "per-source"
robust = "none"
"""


class Line(NamedTuple):
    """One listed line; position and stated uncertainty in the unit of its source."""

    isotopologue: str
    v_upper: int
    v_lower: int
    j_upper: int
    j_lower: int
    position: float
    stated: float

    @property
    def branch(self) -> str:
        return "R" if self.j_upper > self.j_lower else "P"

    @property
    def label(self) -> str:
        return f"{self.branch}({self.j_lower})"

    @property
    def name(self) -> str:
        return f"{self.isotopologue} {self.v_upper}-{self.v_lower} {self.label}"


def reduced_mass(isotopologue: str) -> float:
    first, second = (MASSES[atom] for atom in ATOMS[isotopologue])
    return first * second / (first + second)


def energy(isotopologue: str, v: int, j: int) -> float:
    """Level energy in cm-1, without the constant Y_00."""
    rho = (reduced_mass(REFERENCE) / reduced_mass(isotopologue)) ** 0.5
    departures = {
        element: MASSES[reference] / MASSES[atom] - 1
        for element, reference, atom in zip(BREAKDOWN, ATOMS[REFERENCE], ATOMS[isotopologue], strict=True)
    }
    total = 0.0
    for (v_power, j_power), value in TERMS.items():
        for element, terms in BREAKDOWN.items():
            value += terms.get((v_power, j_power), 0.0) * departures[element]
        total += rho ** (v_power + 2 * j_power) * value * (v + 0.5) ** v_power * (j * (j + 1)) ** j_power
    return total


def wavenumber(isotopologue, v_upper, v_lower, j_upper, j_lower) -> float:
    """True position in cm-1."""
    return energy(isotopologue, v_upper, j_upper) - energy(isotopologue, v_lower, j_lower)


def band(isotopologue, v_upper, v_lower, j_max, rng, *, missing):
    """Quantum numbers of the lines seen in a band, by rising position; blends and gaps take the rest."""
    p_lines = [(isotopologue, v_upper, v_lower, j - 1, j) for j in range(j_max, 0, -1)]
    r_lines = [(isotopologue, v_upper, v_lower, j + 1, j) for j in range(j_max + 1)]
    return [line for line in p_lines + r_lines if rng.random() > missing]


def millimetre_lines(rng) -> list[Line]:
    """Pure rotation in MHz: v = 0, 1, 2 of the main isotopologue, v = 0 of the others."""
    stated = MILLIMETRE_UNCERTAINTY
    sigma = stated / 2 * NOISE_FACTORS["millimetre"]
    lines = []
    for isotopologue, v, j_first, j_last in (
        ("28Si32S", 0, 4, 42), ("28Si32S", 1, 4, 38), ("28Si32S", 2, 6, 34),
        ("29Si32S", 0, 6, 32), ("30Si32S", 0, 6, 30), ("28Si34S", 0, 6, 32),
    ):  # fmt: skip
        for j in range(j_first, j_last + 1):
            if rng.random() > 0.15:
                true = wavenumber(isotopologue, v, v, j + 1, j) / MHZ
                lines.append(Line(isotopologue, v, v, j + 1, j, true + sigma * rng.standard_normal(), stated))
    return lines


def furnace_band(isotopologue, v_upper, v_lower, j_max, weakness, rng, *, scale, noise_factor) -> list[Line]:
    """One infrared band in cm-1; lines of weak bands and of high J are less certain."""
    lines = []
    for numbers in band(isotopologue, v_upper, v_lower, j_max, rng, missing=0.15):
        stated = round(5e-5 * weakness * (1 + (numbers[4] / 70) ** 2), 5)
        noise = noise_factor * stated * rng.standard_normal()
        lines.append(Line(*numbers, wavenumber(*numbers) * (1 + scale) + noise, stated))
    return lines


def furnace_lines(rng, scale: float) -> list[Line]:
    """The infrared emission spectrum: seven bands, one shared scale error, understated noise."""
    lines = []
    for isotopologue, v_upper, v_lower, j_max, weakness in (
        ("28Si32S", 1, 0, 110, 1.0), ("28Si32S", 2, 1, 105, 1.2),
        ("28Si32S", 3, 2, 95, 1.5), ("28Si32S", 4, 3, 85, 2.0),
        ("29Si32S", 1, 0, 65, 2.0), ("30Si32S", 1, 0, 60, 2.4), ("28Si34S", 1, 0, 65, 2.0),
    ):  # fmt: skip
        lines += furnace_band(
            isotopologue, v_upper, v_lower, j_max, weakness, rng,
            scale=scale, noise_factor=NOISE_FACTORS["furnace"],
        )  # fmt: skip
    return lines


def laser_lines(rng) -> list[Line]:
    """Overtones in THz with the uncertainty in units of the last printed digit, 1e-7 THz."""
    lines = []
    for v_upper, v_lower, j_max, unit_sigma in ((2, 0, 48, 10), (3, 1, 42, 14), (3, 0, 44, 18)):
        for numbers in band(REFERENCE, v_upper, v_lower, j_max, rng, missing=0.2):
            stated = (unit_sigma + int(rng.integers(0, 6))) * 1e-7
            noise = NOISE_FACTORS["laser"] * stated * rng.standard_normal()
            lines.append(Line(*numbers, wavenumber(*numbers) / THZ + noise, stated))
    return lines


def find(lines, v_upper: int, v_lower: int, branch: str, j_from: int) -> int:
    """Index of the first listed line of the main isotopologue's branch with J'' of at least `j_from`."""
    return min(
        (
            index
            for index, line in enumerate(lines)
            if line.isotopologue == REFERENCE
            and (line.v_upper, line.v_lower, line.branch) == (v_upper, v_lower, branch)
            and line.j_lower >= j_from
        ),
        key=lambda index: lines[index].j_lower,
    )


def displace(lines) -> int:
    """Move one P line of 1-0; returns its index."""
    index = find(lines, 1, 0, "P", 31)
    lines[index] = lines[index]._replace(position=lines[index].position + DISPLACEMENT)
    return index


def mislabel(lines) -> int:
    """List one R line of 2-1 with J one too high, in place of the line of that label; returns its index."""
    index = find(lines, 2, 1, "R", 23)
    true = lines[index]
    wrong = true._replace(j_upper=true.j_upper + 1, j_lower=true.j_lower + 1)
    lines[:] = [line for line in lines if line[:5] != wrong[:5]]
    lines[index] = wrong
    return index


def transpose(lines) -> int:
    """Exchange the last two printed digits of a 2-0 line, moving it by 5 to 8 sigma; returns its index."""
    index = find(lines, 2, 0, "P", 10)
    while True:
        line = lines[index]
        digits = f"{line.position:.7f}"
        exchanged = float(digits[:-2] + digits[-1] + digits[-2])
        if 5 < abs(exchanged - float(digits)) / line.stated < 8:
            lines[index] = line._replace(position=exchanged)
            return index
        index = find(lines, 2, 0, "P", line.j_lower + 1)


def write_table(path: Path, about: list[str], header: str, rows: list[str]) -> int:
    """Write comments, header and rows; returns the line number, from 1, of the first row."""
    head = [INVENTED, *(f"# {text}" for text in about), header]
    path.write_text("\n".join([*head, *rows]) + "\n", encoding="utf-8", newline="\n")
    return len(head) + 1


def write_furnace(path: Path, about: list[str], lines) -> int:
    rows = [
        f"{x.isotopologue},{x.v_upper},{x.v_lower},{x.branch},{x.j_lower},{x.position:.6f},{x.stated:.5f}"
        for x in lines
    ]
    return write_table(path, about, "iso,v1,v0,br,J,nu,unc", rows)


def write_campaign(folder: Path) -> None:
    """Write `campaign/` (job, three sources, truth) and `next_band/` (the band that comes later)."""
    campaign, later = folder / "campaign", folder / "next_band"
    for place in (campaign, later):
        place.mkdir(parents=True, exist_ok=True)
    # One stream of random numbers for each source, so that a change in one leaves the others.
    streams = [np.random.default_rng([SEED, number]) for number in range(5)]
    scale = round(SCALE_PRIOR * streams[0].standard_normal(), 10)

    millimetre = millimetre_lines(streams[1])
    write_table(
        campaign / "millimetre.csv",
        [f"Pure rotation, MHz. Expanded uncertainty {MILLIMETRE_UNCERTAINTY} MHz (k = 2) for every line."],
        "isotopologue,v,J1,J0,MHz",
        [f"{x.isotopologue},{x.v_upper},{x.j_upper},{x.j_lower},{x.position:.3f}" for x in millimetre],
    )

    furnace = furnace_lines(streams[2], scale)
    mislabelled = mislabel(furnace)
    displaced = displace(furnace)
    furnace_row = write_furnace(
        campaign / "furnace.csv",
        [f"Infrared emission, vacuum cm-1, 1 sigma; scale from reference lines, 1 sigma {SCALE_PRIOR:g}."],
        furnace,
    )

    laser = laser_lines(streams[3])
    transposed = transpose(laser)
    laser_row = write_table(
        campaign / "laser.txt",
        ["Overtone absorption of 28Si32S, THz; in parentheses 1 sigma in units of the last digit."],
        "v1 v0 line  THz",
        [
            f"{x.v_upper:2d} {x.v_lower:2d} {x.label:<5} {x.position:.7f}({round(x.stated * 1e7)})"
            for x in laser
        ],
    )

    write_furnace(
        later / "furnace_5-4.csv",
        ["Infrared emission, vacuum cm-1, 1 sigma. A band that arrives after the campaign."],
        furnace_band(
            REFERENCE, 5, 4, 80, 2.2, streams[4], scale=0.0, noise_factor=NOISE_FACTORS["later-furnace"]
        ),
    )

    (campaign / "sis.toml").write_text(
        JOB.format(
            millimetre_uncertainty=MILLIMETRE_UNCERTAINTY,
            scale_prior=f"{SCALE_PRIOR:g}",
            displaced=furnace_row + displaced,
            mislabelled=furnace_row + mislabelled,
        ),
        encoding="utf-8",
        newline="\n",
    )

    def wrong(source, first_row, lines, index, what):
        return {"source": source, "row": first_row + index, "line": lines[index].name, "what": what}

    truth = {
        "note": "Invented truth behind invented data; cm-1. A row is a line number of the file, from 1.",
        "molecule": "silicon monosulfide",
        "reference": REFERENCE,
        "terms": {f"Y{v_power}{j_power}": value for (v_power, j_power), value in TERMS.items()},
        "breakdown": {
            element: {f"{v_power}{j_power}": value for (v_power, j_power), value in terms.items()}
            for element, terms in BREAKDOWN.items()
        },
        "masses": MASSES,
        "calibration": {"furnace": {"scale": scale}},
        "noise_factors": NOISE_FACTORS,
        "wrong_lines": [
            wrong("furnace", furnace_row, furnace, displaced, f"position {DISPLACEMENT} cm-1 too high"),
            wrong("furnace", furnace_row, furnace, mislabelled, "label one too high in J"),
            wrong("laser", laser_row, laser, transposed, "last two digits of the position exchanged"),
        ],
    }
    (campaign / "truth.json").write_text(json.dumps(truth, indent=2) + "\n", encoding="utf-8", newline="\n")


if __name__ == "__main__":
    write_campaign(Path(sys.argv[1]) if len(sys.argv) > 1 else DEFAULT_FOLDER)
