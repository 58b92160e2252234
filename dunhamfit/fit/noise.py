"""Error policies: by how much the stated uncertainties are multiplied, and for which lines together.

stated      the uncertainties as they stand
common      one factor for all lines
per-source  one factor for each source
per-band    one factor for each band of each isotopologue and source
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from dunhamfit.algebra.triangle import Triangle
from dunhamfit.algebra.variance import noise_factors
from dunhamfit.errors import UsageError
from dunhamfit.fit.design import Groups
from dunhamfit.lines.line_list import LineList

POLICIES = ("stated", "common", "per-source", "per-band")


@dataclass(frozen=True, eq=False)
class Noise:
    """Noise factors in force.

    Attributes
    ----------
    policy : one of `POLICIES`
    names : tuple of str
        What each factor belongs to; empty for the policy "stated".
    label : ndarray of int, shape (groups,)
        Index of the factor of each group of lines.
    factors, sigmas : ndarray of float, shape (factors,)
        Noise factors, and 1 standard uncertainty of each.
    degrees : ndarray of float, shape (factors,)
        Effective degrees of freedom that each rests on.
    determined : ndarray of bool, shape (factors,)
        Whether the lines can tell the factor; it is 1 where they cannot.
    """

    policy: str
    names: tuple[str, ...]
    label: np.ndarray
    factors: np.ndarray
    sigmas: np.ndarray
    degrees: np.ndarray
    determined: np.ndarray

    @property
    def by_group(self) -> np.ndarray:
        """Factor of each group of lines, shape (groups,)."""
        return self.factors[self.label] if len(self.factors) else np.ones(len(self.label))


def check_policy(policy: str) -> str:
    """Return `policy` if it is known; raise UsageError that lists the known ones if it is not."""
    if policy not in POLICIES:
        raise UsageError(f"error policy '{policy}' is not known; use one of {', '.join(POLICIES)}")
    return policy


def as_stated(groups: Groups) -> Noise:
    """The stated uncertainties as they stand."""
    none = np.empty(0)
    return Noise("stated", (), np.zeros(len(groups), dtype=int), none, none, none, np.empty(0, dtype=bool))


def estimate(
    policy: str, triangles: tuple[Triangle, ...], groups: Groups, lines: LineList
) -> tuple[Noise, np.ndarray]:
    """Noise factors by restricted maximum likelihood.

    Parameters
    ----------
    policy : one of `POLICIES` but "stated"
    triangles : tuple of Triangle
        One a group of lines, of the free parameters, about one base; a further one holds the priors.
    groups : Groups
    lines : LineList

    Returns
    -------
    Noise
    ndarray of float, shape (free, free)
        What the covariance of the parameters gains because the factors are themselves estimated.

    Raises
    ------
    NotConverged
    """
    label, names = factor_labels(check_policy(policy), groups, lines)
    count = len(groups)
    # One common factor multiplies everything alike: it is told by as little as one degree of freedom.
    least = {"least_degrees": 1.0} if policy == "common" else {}
    found = noise_factors(triangles[:count], labels=label, fixed=triangles[count:], **least)
    noise = Noise(policy, names, label, found.factors, found.sigmas, found.degrees, found.determined)
    return noise, found.allowance


def group_names(groups: Groups, lines: LineList) -> tuple[str, ...]:
    """`source isotopologue 2-0` of every group."""
    return tuple(
        f"{lines.sources[source].name} {lines.isotopologues[code]} {upper}-{lower}"
        for source, code, upper, lower in zip(
            groups.source, groups.isotopologue, groups.v_upper, groups.v_lower, strict=True
        )
    )


def factor_labels(policy: str, groups: Groups, lines: LineList) -> tuple[np.ndarray, tuple[str, ...]]:
    """Index of the factor of each group, and what each factor belongs to; not for the policy "stated"."""
    if policy == "common":
        return np.zeros(len(groups), dtype=int), ("all lines",)
    if policy == "per-source":
        present, label = np.unique(groups.source, return_inverse=True)
        return label, tuple(lines.sources[code].name for code in present)
    return np.arange(len(groups)), group_names(groups, lines)
