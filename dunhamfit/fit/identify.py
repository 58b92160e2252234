"""What the data cannot determine, said before any constant is: a refusal instead of a wrong answer.

First by structure, from counts of levels, isotopes and sources, since that can be said in
plain words; then by the numerical rank of the scaled rows, which catches the rest.
"""

from __future__ import annotations

from collections import defaultdict

import numpy as np

from dunhamfit.algebra.rank import Rank, judge
from dunhamfit.errors import CannotDetermine
from dunhamfit.fit.design import Design, Groups
from dunhamfit.fit.model import Model, Parameter
from dunhamfit.lines.line_list import LineList


def check_structure(model: Model, lines: LineList, design: Design) -> None:
    """Refuse what counting alone shows to be undetermined.

    Raises
    ------
    CannotDetermine
        With every such finding in the message, and the terms concerned.
    """
    bands, terms = _bands(design.groups), _free_terms(model)
    findings = [
        *_breakdown_without_isotopes(model, [lines.isotopologues[code] for code in bands]),
        *_vibration_beyond_levels(terms[0], bands.values()),
        *_rotation_beyond_levels(terms, bands),
        *_all_scales_free(model, {lines.sources[code].name for code in set(design.groups.source.tolist())}),
    ]
    findings = findings or _too_few_lines(model, design)
    if findings:
        names = tuple(dict.fromkeys(name for concerned, _ in findings for name in concerned))
        text = "\n".join(sentence for _, sentence in findings)
        raise CannotDetermine(f"the data cannot determine the model:\n{text}", terms=names)


def check_rank(model: Model, r: np.ndarray) -> Rank:
    """Refuse where the scaled rows of the free parameters are singular to working precision.

    Parameters
    ----------
    model : Model
    r : ndarray of float, shape (m, free parameters)

    Raises
    ------
    CannotDetermine
        Naming the parameters that cannot be told from the others, and which those are.
    """
    free = [item for item, fixed in zip(model.parameters, model.fixed, strict=True) if not fixed]
    preference = {"term": 0, "breakdown": 1, "offset": 2, "scale": 2}
    order = sorted(
        range(len(free)), key=lambda i: (preference[free[i].kind], free[i].k + free[i].l, free[i].k)
    )
    rank = judge(r, order)
    if not rank.dependent:
        return rank
    lost = [free[i].name for i in rank.dependent]
    share = np.sqrt((rank.null**2).sum(axis=0))
    mixed = [free[i].name for i in np.argsort(-share) if share[i] > 0.05 and free[i].name not in lost]
    text = f"the data cannot determine {listed(lost)}: "
    if mixed:
        text += f"every line can be reproduced as well by a change of {listed(mixed[:8])} instead. "
    else:
        text += "no line used depends on it. "
    text += _what_would_fix([free[i] for i in rank.dependent])
    raise CannotDetermine(text, terms=lost)


def floating_bands(groups: Groups) -> list[str]:
    """Names of the bands that share no vibrational level with the largest connected set of bands."""
    bands = defaultdict(int)
    for *band, count in zip(groups.v_upper.tolist(), groups.v_lower.tolist(), groups.lines.tolist(), strict=True):
        bands[tuple(band)] += count
    sets = _connected(bands)
    main = max(sets, key=lambda levels: sum(n for (upper, _), n in bands.items() if upper in levels))
    return [f"{upper}-{lower}" for upper, lower in sorted(bands) if upper not in main]


def listed(names) -> str:
    """`a`, `a and b`, `a, b and c`."""
    names = list(names)
    return names[0] if len(names) == 1 else f"{', '.join(names[:-1])} and {names[-1]}"


def _bands(groups: Groups) -> dict[int, set[tuple[int, int]]]:
    """Bands (v', v'') of each isotopologue code."""
    bands = defaultdict(set)
    columns = (groups.isotopologue, groups.v_upper, groups.v_lower)
    for code, upper, lower in zip(*(column.tolist() for column in columns), strict=True):
        bands[code].add((upper, lower))
    return bands


def _free_terms(model: Model) -> dict[int, list[Parameter]]:
    """Terms without a prior for each l, in the order of k."""
    terms = defaultdict(list)
    for item in model.constants:
        if item.kind == "term" and model.prior(item) is None:
            terms[item.l].append(item)
    return terms


def _breakdown_without_isotopes(model: Model, names):
    """Breakdown terms of an atom of which the isotopologues `names` and the reference have one isotope."""
    for atom in dict.fromkeys(item.atom for item in model.constants if item.atom):
        concerned = [item.name for item in model.constants if item.atom == atom and model.prior(item) is None]
        isotopes = {
            nuclide
            for molecule in (model.reference, *map(model.isotopologue, names))
            for nuclide, element in zip(molecule.nuclides, molecule.elements, strict=True)
            if element == atom
        }
        if concerned and len(isotopes) < 2:
            yield (
                concerned,
                f"{listed(concerned)}: every line has the same isotope {isotopes.pop()} of {atom}, and a breakdown "
                "term shows only in the difference between isotopes; add lines of an isotopologue with another "
                f"isotope of {atom}, or remove the breakdown terms of {atom}.",
            )


def _vibration_beyond_levels(terms, bands):
    """k at l = 0 against the independent differences of vibrational levels."""
    connected = [_connected(of_isotopologue) for of_isotopologue in bands]
    differences = sum(len(levels) - 1 for sets in connected for levels in sets)
    if len(terms) <= differences:
        return
    reached = {level for sets in connected for levels in sets for level in levels}
    floating = [levels for sets in connected for levels in sets[1:]]
    lost = [item.name for item in terms[differences:]]
    largest = f"at most {terms[differences - 1].name}" if differences else "no term with l = 0"
    levels = "level" if len(reached) == 1 else "levels"
    reason = f"the lines reach {len(reached)} vibrational {levels} ({_ranges(reached)})"
    if floating:
        reason += f", and those of {_ranges(floating[0])} share no level with the rest"
    yield (
        lost,
        f"{listed(lost)}: {len(terms)} terms with l = 0 need as many independent differences between vibrational "
        f"levels; {reason}, which makes {differences}. Add bands that reach or join more vibrational levels, or "
        f"ask for {largest}.",
    )


def _rotation_beyond_levels(free_terms, bands):
    """k at each l of 1 and more against the vibrational levels whose rotation is seen."""
    levels = {(code, v) for code, of_isotopologue in bands.items() for band in of_isotopologue for v in band}
    reached = {v for _, v in levels}
    for l, terms in sorted(free_terms.items()):
        if l and len(terms) > len(levels):
            lost = [item.name for item in terms[len(levels) :]]
            yield (
                lost,
                f"{listed(lost)}: {len(terms)} terms with l = {l} need as many vibrational levels; the lines reach "
                f"{len(levels)} ({_ranges(reached)}). Add bands that reach other vibrational levels, or ask for at "
                f"most {terms[len(levels) - 1].name}.",
            )


def _all_scales_free(model: Model, used: set[str]):
    free = [item for item in model.parameters if item.kind == "scale" and model.prior(item) is None]
    if used and used <= {item.source for item in free}:
        names = [item.name for item in free]
        yield (
            names,
            f"{listed(names)}: a free scale on every source only multiplies all constants by a common factor; give "
            "at least one source a scale with a stated uncertainty, or none.",
        )


def _too_few_lines(model: Model, design: Design):
    free = [item.name for item, fixed in zip(model.parameters, model.fixed, strict=True) if not fixed]
    independent = len(design.rows.scale)
    if len(free) <= independent:
        return []
    return [
        (free, f"{len(free)} terms, {independent} independent lines; add lines, or ask for fewer terms."),
    ]


def _connected(bands) -> list[set[int]]:
    """Sets of vibrational levels joined by bands, the largest first."""
    sets: list[set[int]] = []
    for band in bands:
        joined, apart = set(band), []
        for levels in sets:
            if levels.isdisjoint(band):
                apart.append(levels)
            else:
                joined |= levels
        sets = [*apart, joined]
    return sorted(sets, key=lambda levels: (-len(levels), min(levels)))


def _ranges(levels) -> str:
    """`v = 0-7`, `v = 0, 1 and 5`."""
    levels = sorted(levels)
    if levels == list(range(levels[0], levels[-1] + 1)) and len(levels) > 2:
        return f"v = {levels[0]}-{levels[-1]}"
    return f"v = {listed([str(v) for v in levels])}"


def _what_would_fix(parameters) -> str:
    advice = []
    terms = [item for item in parameters if item.kind == "term"]
    if any(item.l == 0 for item in terms):
        advice.append("bands that reach further vibrational levels")
    if any(item.l > 0 for item in terms):
        advice.append("lines of higher J in more bands")
    for atom in sorted({item.atom for item in parameters if item.atom}):
        advice.append(f"lines of isotopologues that differ in {atom} alone")
    for item in parameters:
        if item.source:
            advice.append(f"a stated uncertainty for the {item.kind} of source {item.source}")
    return (
        f"What would fix it: {' or '.join(advice)}; or remove {listed([item.name for item in parameters])}."
    )
