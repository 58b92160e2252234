"""Worked examples of weighted straight lines from two international documents.

JCGM 100:2008 (GUM), Annex H.3, and ISO/TS 28037:2010, clause 6.3, examples 1 and 2, and
Annex E. The data are those printed there. The documents print three or four digits of the
answers; the fifteen here were solved from the data in rational arithmetic, and round to
what is printed: H.3 y1 = -0.1712(29), y2 = 0.00218(67), r = -0.930, b(30) = -0.1494(41);
example 2 a = 0.885(530), b = 2.057(178), cov = -0.082.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction


@dataclass(frozen=True)
class StraightLine:
    """y = a + b x; `sigma` is empty where the scatter of the points gives it (n - 2 degrees of freedom)."""

    name: str
    x: tuple[Fraction, ...]
    y: tuple[float, ...]
    sigma: tuple[float, ...]
    a: float
    u_a: float
    b: float
    u_b: float
    covariance: float
    chi2: float


def _gum_h3(origin: Fraction | None, name: str, a: float, u_a: float, r: float) -> StraightLine:
    temperature = (21521, 22012, 22512, 23003, 23507, 23999, 24513, 25002, 25503, 26010, 26511)
    correction = (-0.171, -0.169, -0.166, -0.159, -0.164, -0.165, -0.156, -0.157, -0.159, -0.161, -0.160)
    t = [Fraction(value, 1000) for value in temperature]
    origin = sum(t) / len(t) if origin is None else origin
    u_b = 0.000667938773227832
    return StraightLine(
        name=name,
        x=tuple(value - origin for value in t),
        y=correction,
        sigma=(),
        a=a,
        u_a=u_a,
        b=0.00218269773988728,
        u_b=u_b,
        covariance=r * u_a * u_b,
        chi2=0.000110096583109297,
    )


GUM_H3 = _gum_h3(Fraction(20), "GUM H.3", -0.17120379013135, 0.00287759783515995, -0.930429603093446)
GUM_H3_MEAN = _gum_h3(None, "GUM H.3 about the mean", -0.162454545454545, 0.00105455521338321, 0.0)
# GUM H.3.5: the correction predicted at 30 degrees.
GUM_H3_AT_30 = (-0.149376812732477, 0.00413859575285495)

_ONE_TO_SIX = tuple(Fraction(i) for i in range(1, 7))
ISO_28037_EXAMPLE_1 = StraightLine(
    name="ISO/TS 28037 6.3 example 1",
    x=_ONE_TO_SIX,
    y=(3.3, 5.6, 7.1, 9.3, 10.7, 12.1),
    sigma=(0.5,) * 6,
    a=1.86666666666667,
    u_a=0.465474668125631,
    b=1.75714285714286,
    u_b=0.119522860933439,
    covariance=-0.05,
    chi2=1.6647619047619,
)
ISO_28037_EXAMPLE_2 = StraightLine(
    name="ISO/TS 28037 6.3 example 2",
    x=_ONE_TO_SIX,
    y=(3.2, 4.3, 7.6, 8.6, 11.7, 12.8),
    sigma=(0.5, 0.5, 0.5, 1.0, 1.0, 1.0),
    a=0.885232067510549,
    u_a=0.529708143508836,
    b=2.05696202531646,
    u_b=0.177892016741205,
    covariance=-0.0822784810126582,
    chi2=4.13080168776371,
)
ISO_28037_ANNEX_E = StraightLine(
    name="ISO/TS 28037 Annex E",
    x=_ONE_TO_SIX,
    y=(3.014, 5.225, 7.004, 9.061, 11.201, 12.762),
    sigma=(),
    a=1.172,
    u_a=0.158875093196181,
    b=1.96357142857143,
    u_b=0.0407953578791729,
    covariance=-0.00582491428571429,
    chi2=0.116498285714286,
)
STRAIGHT_LINES = (GUM_H3, GUM_H3_MEAN, ISO_28037_EXAMPLE_1, ISO_28037_EXAMPLE_2, ISO_28037_ANNEX_E)
