"""Numbers as text: value(sigma), the notation of the printed tables, and the way back.

The digits in parentheses are the standard uncertainty in units of the last digits of
the value: 2143.2711(12) means 2143.2711 with a standard uncertainty of 0.0012 (JCGM
100:2008, 7.2.2, form 2). Where the value needs a power of ten, it applies to both:
-6.1215(3)e-06 has the uncertainty 0.0003e-06. Rounding works on the shortest decimal
form of a double, the one a user types and reads, with ties to the even digit (ISO
80000-1:2009, B.3, rule A).
"""

from __future__ import annotations

import math
import re
from decimal import ROUND_HALF_EVEN, Context, Decimal

from dunhamfit.errors import UsageError

# Doubles reach from 1e308 down to 5e-324, so 700 digits hold any of them: only the rounding
# that is asked for ever happens.
_EXACT = Context(prec=700, rounding=ROUND_HALF_EVEN)

# Numbers whose leading digit stands between 1e-3 and 1e15 (the last place a double keeps
# whole) are written out, others with a power of ten: residuals of one column, mostly smaller
# than 1e-3 cm-1, then look alike.
_WRITTEN_OUT = range(-3, 16)

_VALUE_SIGMA = re.compile(
    r"(?P<value>[-+]?(?:\d+(?:\.(?P<decimals>\d*))?|\.(?P<bare_decimals>\d+)))"
    r"(?:\((?P<sigma>\d+(?:\.\d*)?|inf|nan)\))?"
    r"(?:[eE](?P<power>[-+]?\d+))?",
    re.ASCII,
)


def format_value(value: float, sigma: float, *, digits: int = 2) -> str:
    """Value and standard uncertainty as one text, rounded to `digits` digits of the uncertainty.

    Parameters
    ----------
    value : float
    sigma : float, in the unit of `value`
        Zero means that the value is exact or fixed: it is then written with every digit
        needed to read the same double back, and no parentheses.
    digits : int
        Significant digits of the uncertainty. With two, rounding the value moves it by at
        most a twentieth of its uncertainty.

    Returns
    -------
    str
        "nan", "inf" or "-inf" for such a value; an unknown or infinite uncertainty shows as
        ``(nan)`` or ``(inf)`` behind the unrounded value.

    Raises
    ------
    UsageError
        If `sigma` is negative or `digits` below 1.

    Examples
    --------
    >>> format_value(2169.8127228, 0.0000213)
    '2169.812723(21)'
    >>> format_value(-6.12147e-6, 3.1e-10, digits=1)
    '-6.1215(3)e-06'
    """
    value, sigma = float(value), float(sigma)
    _check_digits(digits)
    if sigma < 0.0:
        raise UsageError(f"'sigma' must not be negative (got {sigma!r} for the value {value!r})")
    if not math.isfinite(value):
        return str(value)
    if sigma == 0.0:
        return _layout(_decimal(value), None)
    if not math.isfinite(sigma):
        text, _, power = _layout(_decimal(value), None).partition("e")
        return f"{text}({sigma})" + (f"e{power}" if power else "")
    rounded_sigma = _to_figures(_decimal(sigma), digits)
    last = Decimal((0, (1,), rounded_sigma.as_tuple().exponent))
    return _layout(_decimal(value).quantize(last, context=_EXACT), rounded_sigma)


def format_number(value: float, *, digits: int = 4) -> str:
    """A number without an uncertainty, rounded to `digits` significant digits.

    Raises
    ------
    UsageError
        If `digits` is below 1.

    Examples
    --------
    >>> format_number(1.02999), format_number(312345.6), format_number(2.5e-5, digits=2)
    ('1.030', '3.123e+05', '2.5e-05')
    """
    value = float(value)
    _check_digits(digits)
    if not math.isfinite(value):
        return str(value)
    if value == 0.0:
        return "0"
    return _layout(_to_figures(_decimal(value), digits), None)


def parse_value_sigma(text: str) -> tuple[float, float]:
    """Value and standard uncertainty that `format_value` printed; exact numbers have sigma zero.

    An uncertainty with a decimal point, 2143.2711(0.0012), is in the unit of the value
    (JCGM 100:2008, 7.2.2, form 3). U+2212 counts as a minus sign.

    Raises
    ------
    UsageError
        If the text is not a number of this form.

    Examples
    --------
    >>> parse_value_sigma("2143.2711(12)")
    (2143.2711, 0.0012)
    """
    plain = text.strip().replace("\N{MINUS SIGN}", "-")
    if plain in ("nan", "inf", "-inf"):
        return float(plain), 0.0
    match = _VALUE_SIGMA.fullmatch(plain)
    if match is None:
        raise UsageError(f"expected a number such as 2143.2711(12) or -6.1215(3)e-06 (got {text!r})")
    power = match["power"] or "0"
    value = float(f"{match['value']}e{power}")
    sigma = match["sigma"]
    if sigma is None:
        return value, 0.0
    if sigma in ("inf", "nan"):
        return value, float(sigma)
    if "." in sigma:
        return value, float(f"{sigma}e{power}")
    decimals = len(match["decimals"] or match["bare_decimals"] or "")
    return value, float(f"{sigma}e{int(power) - decimals}")


def _check_digits(digits: int) -> None:
    if digits < 1:
        raise UsageError(f"'digits' must be 1 or more (got {digits!r})")


def _decimal(value: float) -> Decimal:
    """The shortest decimal number that reads back as `value`; without a sign if it is zero."""
    shortest = repr(value)
    return Decimal(shortest.removesuffix(".0")) if value else Decimal(0)


def _to_figures(number: Decimal, digits: int) -> Decimal:
    """`number`, not zero, rounded to exactly `digits` significant digits."""
    rounded = number
    # Twice, because 9.96 becomes 10.0 in the first round: one digit more than was asked for.
    for _ in range(2):
        last = Decimal((0, (1,), rounded.adjusted() - digits + 1))
        rounded = rounded.quantize(last, context=_EXACT)
    return rounded


def _layout(value: Decimal, sigma: Decimal | None) -> str:
    """Write rounded numbers out, or with a power of ten where that would take idle zeros.

    Up to one idle zero before the decimal point is written out: 1230(120), but 1.23(12)e+04.
    """
    sign, figures, last = value.as_tuple()
    size = sigma if sigma is not None and (not value or sigma.adjusted() > value.adjusted()) else value
    lead = size.adjusted() if size else 0
    power = 0 if lead in _WRITTEN_OUT and last <= 1 else lead
    # A value that rounds to zero has no sign: "-0.0(12)" would claim one.
    shown = Decimal((sign if value else 0, figures, last - power))
    text = format(shown, "f")
    if sigma is not None:
        in_last_digits = int(sigma.scaleb(-min(last, 0) if not power else -last, context=_EXACT))
        text += f"({in_last_digits})"
    return text + (f"e{power:+03d}" if power else "")
