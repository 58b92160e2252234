"""Units of line positions. cm-1 inside the program; every other unit is converted at the edge.

1 cm-1 = 29979.2458 MHz exactly, by the definition of the metre (SI brochure, 9th
edition, 2019). Wavelengths are vacuum wavelengths in micrometres.
"""

from __future__ import annotations

import numpy as np

from dunhamfit.errors import UsageError

MHZ_PER_WAVENUMBER = 29979.2458
WAVENUMBER_MICROMETRES = 1e4

# How many of the unit make one cm-1, for the units that are proportional to it.
_PER_WAVENUMBER = {
    "cm-1": 1.0,
    "MHz": MHZ_PER_WAVENUMBER,
    "GHz": MHZ_PER_WAVENUMBER / 1e3,
    "THz": MHZ_PER_WAVENUMBER / 1e6,
}
UNITS = (*_PER_WAVENUMBER, "um")


def check_unit(unit: str) -> str:
    """Return `unit` if it is known; raise UsageError that lists the known ones if it is not."""
    if unit not in UNITS:
        raise UsageError(f"unit '{unit}' is not known; use one of {', '.join(UNITS)} (um: vacuum wavelength)")
    return unit


def to_wavenumber(position, unit: str) -> np.ndarray:
    """Positions in `unit` as cm-1.

    Parameters
    ----------
    position : array_like of float, any shape, in `unit`
    unit : one of `UNITS`

    Returns
    -------
    ndarray of float, same shape, cm-1
    """
    position = np.asarray(position, dtype=float)
    if check_unit(unit) == "um":
        return WAVENUMBER_MICROMETRES / position
    if unit == "cm-1":
        return position.copy()
    return position / _PER_WAVENUMBER[unit]


def from_wavenumber(position, unit: str) -> np.ndarray:
    """Positions in cm-1 as `unit`: the inverse of `to_wavenumber`."""
    position = np.asarray(position, dtype=float)
    if check_unit(unit) == "um":
        return WAVENUMBER_MICROMETRES / position
    return position * _PER_WAVENUMBER[unit]


def sigma_to_wavenumber(sigma, position, unit: str) -> np.ndarray:
    """Uncertainties in `unit` as cm-1, to first order.

    Parameters
    ----------
    sigma : array_like of float, in `unit`
    position : array_like of float, in `unit`
        Needed for wavelengths only, where d(1/x) = dx/x^2.
    """
    sigma = np.asarray(sigma, dtype=float)
    if check_unit(unit) == "um":
        return sigma * WAVENUMBER_MICROMETRES / np.asarray(position, dtype=float) ** 2
    return sigma / _PER_WAVENUMBER[unit]
