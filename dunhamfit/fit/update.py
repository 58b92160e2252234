"""A fit taken further by new lines: from its triangles alone, whatever the number of old lines.

Lines that are stacked under a triangle give the same constants as all lines together (updating
of orthogonal factors: Golub and Van Loan, Matrix Computations, 4th ed., section 6.5). Noise
factors too are found from triangles (`dunhamfit.fit.noise`), so that under the same model and
error policy the result is that of a fit to all lines.
"""

from __future__ import annotations

from dataclasses import fields, replace

import numpy as np
from scipy.linalg import cholesky

from dunhamfit.algebra.triangle import Triangle, covariance_factor, merge, solve
from dunhamfit.errors import UsageError
from dunhamfit.fit.design import Design, Groups, build_design
from dunhamfit.fit.identify import check_rank, floating_bands, listed
from dunhamfit.fit.merit import statistics_of
from dunhamfit.fit.model import Model
from dunhamfit.fit.noise import Noise, as_stated, estimate
from dunhamfit.fit.record import Fit
from dunhamfit.fit.remarks import noise_remarks
from dunhamfit.fit.solve import fit_model
from dunhamfit.lines.deferred import append_lines
from dunhamfit.lines.line_list import LineList, line_columns
from dunhamfit.lines.line_list import merge as merge_lines

# A step gains some ten digits; the second one takes away what the first has left.
_STEPS = 2
# Beyond this condition triangles no longer keep nine digits of every sigma, and the lines are read again.
_WELL_POSED = 1e6


def update_fit(fit: Fit, new_lines: LineList) -> Fit:
    """The fit to the old and the new lines, with the same terms and error policy.

    Old lines are not looked at: the cost does not depend on their number. Only where the
    condition exceeds 1e6 is everything fitted again from the lines.

    Parameters
    ----------
    fit : Fit
        A plain one: without a robust loss and without relations between its parameters.
    new_lines : LineList
        Lines of sources that the fit does not have; these bring their own calibration terms.

    Returns
    -------
    Fit
        As `dunhamfit.fit.solve.fit_model` makes it; `lines` are the old and the new ones.

    Raises
    ------
    UsageError
        If the fit is a robust one, or holds a source or a file of the new lines already.
    CannotDetermine
        If no new line is used, or a calibration term of a new source cannot be told.
    NotConverged
        If the noise factors do not settle.
    """
    if fit.robust != "none":
        raise UsageError(f"a fit with robust loss '{fit.robust}' weighs all lines anew; fit all of them again")
    added = lines_for(fit, new_lines)
    model = extended_model(fit.model, added)
    design = build_design(model, added)
    base = np.zeros(len(model.parameters))
    base[: len(fit.values)] = fit.values
    count = len(fit.groups)
    old = [_padded(item, base) for item in fit.triangles[:count]]
    triangles = [*old, *design.rows.triangles(base)]
    design = replace(design, groups=_joined(fit.groups, design.groups))
    return _fit(fit, model, append_lines(fit.lines, added), triangles, design)


def lines_for(fit: Fit, new_lines: LineList) -> LineList:
    """New lines with the codes they have behind those of a fit, whose own lines are not read.

    Raises
    ------
    UsageError
        If the fit holds a source or a file of the new lines already.
    """
    known = fit.lines
    names = {source.name for source in known.sources}
    digests = {digest: source.name for source in known.sources for digest in source.digests if digest}
    for source in new_lines.sources:
        if source.name in names:
            raise UsageError(f"there is a source '{source.name}' already; give the new one a name of its own")
        for file, digest in zip(source.files, source.digests, strict=False):
            if digest in digests:
                raise UsageError(f"{file} was read as source '{digests[digest]}' already; its lines would count double")
    nothing = LineList(
        **{item.name: np.empty(0) for item in line_columns()},
        isotopologues=known.isotopologues,
        sources=known.sources,
        reasons=known.reasons,
    )
    return merge_lines([nothing, new_lines])


def extended_model(model: Model, added: LineList) -> Model:
    """The model with the calibration terms of the used sources of `added` behind its own."""
    sources = [added.sources[code] for code in np.unique(added.source[added.used])]
    calibrated = (item for item in sources if item.offset is not None or item.scale is not None)
    return replace(model, calibration=(*model.calibration, *calibrated))


def _padded(triangle: Triangle, base: np.ndarray) -> Triangle:
    """The triangle with further parameters on which its lines do not depend."""
    r = np.zeros((len(triangle.r), len(base)))
    r[:, : triangle.parameters] = triangle.r
    return replace(triangle, r=r, base=np.append(triangle.base, base[triangle.parameters :]))


def _joined(old: Groups, new: Groups) -> Groups:
    return Groups(*(np.concatenate([getattr(old, item.name), getattr(new, item.name)]) for item in fields(Groups)))


def _fit(fit: Fit, model: Model, lines: LineList, triangles: list[Triangle], design: Design) -> Fit:
    """The fit from the triangles of every group and of the priors, about one base near the solution."""
    policy, count = fit.noise.policy, len(design.groups)
    free = np.flatnonzero(~model.fixed)
    values = np.array(triangles[0].base)
    held = len(free) < len(values)
    own = [item.chosen(free) for item in triangles] if held else triangles
    rank = check_rank(model, merge(own).r)
    if rank.condition > _WELL_POSED:
        return fit_model(model, lines, policy=policy)
    noise, allowance = as_stated(design.groups), None
    if policy != "stated":
        noise, allowance = estimate(policy, tuple(own), design.groups, lines)
    weighted = [item.scaled(factor) for item, factor in zip(own, noise.by_group, strict=False)] + own[count:]
    whole, solution = merge(weighted), values[free]
    for _ in range(_STEPS):
        whole = merge(weighted, solution)
        solution = solve(whole)
    values[free] = solution
    inner = covariance_factor(whole.r)
    if allowance is not None:
        inner = inner @ cholesky(np.eye(len(free)) + whole.r @ allowance @ whole.r.T, lower=True)
    factor = np.zeros((len(values), len(free)))
    factor[free] = inner
    triangles = tuple(item.shifted(values) for item in triangles)
    made = Fit(
        model=model,
        lines=lines,
        values=values,
        factor=factor,
        noise=noise,
        groups=design.groups,
        statistics=statistics_of(triangles, noise, parameters=len(free), condition=rank.condition),
        warnings=_warnings(lines, design, noise),
        origins=fit.origins,
    )
    # `Fit.triangles` would be made from the lines on first use.
    vars(made)["triangles"] = triangles
    return made


def _warnings(lines: LineList, design: Design, noise: Noise) -> tuple[str, ...]:
    floating = floating_bands(design.groups)
    if not floating:
        return noise_remarks(noise)
    return (
        f"bands {listed(floating)} share no vibrational level with the rest: only the form of the model, "
        "and no line, ties them to it",
        *noise_remarks(noise),
    )
