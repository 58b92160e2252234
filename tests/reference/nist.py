"""The eleven linear regression sets of the NIST Statistical Reference Datasets.

NIST/ITL, Statistical Reference Datasets, https://www.itl.nist.gov/div898/strd/ (public
domain). Certified coefficients and standard deviations are NIST's, to 15 digits. The
covariance matrices, which NIST does not publish, were solved in rational arithmetic from
NIST's data, to 20 digits, and the same solution confirms every certified value to 4.5e-15.
"""

from __future__ import annotations

import json
from dataclasses import dataclass
from fractions import Fraction
from pathlib import Path

_FILE = Path(__file__).with_name("nist_strd_linear.json")


@dataclass(frozen=True)
class Certified:
    """One data set, every number exactly as the decimals say.

    Attributes
    ----------
    name : str
    matrix : list of rows of Fraction
        The columns of the model as NIST states it.
    observed : list of Fraction
    values, sigmas : list of Fraction
        Certified.
    residual_sigma : Fraction
        Certified residual standard deviation.
    covariance : list of rows of Fraction
    """

    name: str
    matrix: list[list[Fraction]]
    observed: list[Fraction]
    values: list[Fraction]
    sigmas: list[Fraction]
    residual_sigma: Fraction
    covariance: list[list[Fraction]]


def certified_sets() -> list[Certified]:
    return [_certified(name, item) for name, item in json.loads(_FILE.read_text(encoding="utf-8")).items()]


def _certified(name: str, item: dict) -> Certified:
    rows = [[Fraction(text) for text in line.split(",")] for line in item["data_csv"][1:]]
    certified = item["certified"]
    return Certified(
        name=name,
        matrix=[_terms(name, row[1:], item["p"]) for row in rows],
        observed=[row[0] for row in rows],
        values=[Fraction(text) for text in certified["beta"]],
        sigmas=[Fraction(text) for text in certified["sd"]],
        residual_sigma=Fraction(certified["rsd"]),
        covariance=[[Fraction(text) for text in row] for row in item["exact"]["cov"]],
    )


def _terms(name: str, x: list[Fraction], count: int) -> list[Fraction]:
    if name == "Longley":
        return [Fraction(1), *x]
    if name.startswith("NoInt"):
        return x
    return [x[0] ** k for k in range(count)]
