"""Turning points, the potential on its grid and the check of it: tables and the JSON document.

What is read here are declared fields only, of `dunhamfit.results.turning_points.MolecularCurve`.
"""

from __future__ import annotations

import numpy as np

from dunhamfit.show.numbers import format_number, format_value
from dunhamfit.show.tables import Column, Table


def curve_document(curve) -> dict[str, object]:
    """What `derive --turning-points --json` adds."""
    points, check = curve.points, curve.check
    return {
        "turning_points": [
            {
                "v": int(v),
                "energy": energy,
                "r_min": r_min,
                "r_min_sigma": r_min_sigma,
                "r_max": r_max,
                "r_max_sigma": r_max_sigma,
            }
            for v, energy, r_min, r_min_sigma, r_max, r_max_sigma in zip(
                points.v.tolist(),
                points.energy.tolist(),
                points.r_min.tolist(),
                points.r_min_sigma.tolist(),
                points.r_max.tolist(),
                points.r_max_sigma.tolist(),
                strict=True,
            )
        ],
        "turning_points_covariance": points.covariance.tolist(),
        "potential": {
            "unit_r": "A",
            "unit_energy": "cm-1",
            "reduced_mass_u": curve.mu,
            "r": curve.grid.r.tolist(),
            "energy": curve.grid.energy.tolist(),
            "extrapolated": curve.grid.extrapolated.tolist(),
        },
        "potential_check": {
            "v": check.v.tolist(),
            "origin": check.origin.tolist(),
            "rotation": check.rotation.tolist(),
            "zero_point": check.zero_point,
        },
    }


def curve_table(curve) -> Table:
    """One row a level: turning points, and what the radial equation on the curve gives back."""
    points, check = curve.points, curve.check
    rows = tuple(
        (
            f"{v:g}",
            f"{energy:.4f}",
            format_value(float(r_min), float(r_min_sigma)),
            format_value(float(r_max), float(r_max_sigma)),
            format_number(origin, digits=2),
            format_number(rotation, digits=2),
        )
        for v, energy, r_min, r_min_sigma, r_max, r_max_sigma, origin, rotation in zip(
            points.v,
            points.energy,
            points.r_min,
            points.r_min_sigma,
            points.r_max,
            points.r_max_sigma,
            check.origin,
            check.rotation,
            strict=True,
        )
    )
    columns = (
        Column("v", "right"),
        Column("energy", "decimal", "cm-1"),
        Column("r_min", "decimal", "A"),
        Column("r_max", "decimal", "A"),
        Column("check of G(v) - G(0)", "right", "cm-1"),
        Column("check of B_v", "right", "cm-1"),
    )
    notes = (
        "Energy is above the minimum of the potential. Sigma is that of the constants; the semiclassical method and "
        "h/(8 pi^2 c u) have errors of their own.",
        f"Check: the radial equation on the curve through these points, on {len(curve.grid.r)} points from "
        f"{curve.grid.r[0]:.4f} to {curve.grid.r[-1]:.4f} A, less the constants it came from: at the most "
        f"{format_number(float(np.abs(check.origin).max()), digits=2)} cm-1 in G(v) - G(0) and "
        f"{format_number(float(np.abs(check.rotation).max()), digits=2)} cm-1 in B_v.",
    )
    return Table(f"Turning points of {curve.isotopologue}", columns, rows, notes)
