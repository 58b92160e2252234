"""The line list as a table with a byte-by-byte description of every column, the form that astronomical and
spectroscopic data archives take (machine-readable table standard of the American Astronomical Society and the
CDS); astropy writes it."""

from __future__ import annotations

import io
import math

import numpy as np
from astropy.io import ascii as ascii_tables
from astropy.table import Column, Table

from dunhamfit.fit.record import Fit

_TITLE = "Title:"


def line_table(fit: Fit, *, title: str) -> str:
    """All lines with residuals, excluded ones flagged.

    Parameters
    ----------
    fit : Fit
    title : str
        One line; stands at the head of the file.
    """
    lines, residuals = fit.lines, fit.residuals
    known = np.flatnonzero(np.isfinite(residuals))
    factor = np.ones(len(lines))
    factor[fit.design.used] = fit.noise.by_group[fit.design.group_of]
    weights = np.ones(len(lines)) if fit.line_weights is None else fit.line_weights
    # Two digits beyond the smallest uncertainty, so that the table gives every line back as it was used.
    decimals = max(2 - math.floor(math.log10(float(lines.sigma[known].min()))), 0)
    places = f"%.{decimals}f"
    columns = (
        ("Iso", [lines.isotopologues[lines.isotopologue[i]] for i in known], None, None, "Isotopologue"),
        ("v1", lines.v_upper[known], None, None, "Vibrational quantum number, upper level"),
        ("J1", lines.j_upper[known], None, None, "Rotational quantum number, upper level"),
        ("v0", lines.v_lower[known], None, None, "Vibrational quantum number, lower level"),
        ("J0", lines.j_lower[known], None, None, "Rotational quantum number, lower level"),
        ("Obs", lines.position[known], "cm-1", places, "Observed position in vacuum"),
        ("e_Obs", lines.sigma[known], "cm-1", "%.3e", "Stated uncertainty (1 sigma)"),
        ("Calc", lines.position[known] - residuals[known], "cm-1", places, "Calculated position"),
        ("O-C", residuals[known], "cm-1", places, "Observed less calculated"),
        ("Factor", factor[known], None, "%.5g", "Noise factor of the fit"),
        ("Weight", weights[known], None, "%.5f", "Weight of the robust loss, 1 for none"),
        ("Flag", ["u" if lines.used[i] else "x" for i in known], None, None, "u: used in the fit, x: excluded"),
        ("Source", [lines.sources[lines.source[i]].name for i in known], None, None, "Source of the line"),
    )
    table = Table([_column(*column) for column in columns])
    stream = io.StringIO()
    ascii_tables.write(table, stream, format="mrt")
    one_line = " ".join(title.split()) or "Lines of the fit"
    return stream.getvalue().replace(_TITLE, f"{_TITLE} {one_line}", 1)


def _column(name: str, values, unit: str | None, form: str | None, meaning: str) -> Column:
    return Column(np.asarray(values), name=name, unit=unit, format=form, description=meaning)
