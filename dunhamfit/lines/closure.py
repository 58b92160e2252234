"""The checks that need no model: combination differences and closed loops of bands.

Two checks, kept apart. `differences` allows every band of every source an offset of its own and
names single lines; `loops` asks whether these offsets vanish and names bands. Both rest on the stated
uncertainties, and share one false-alarm probability among all tests they make.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from dunhamfit.errors import UsageError
from dunhamfit.lines.differences import checked_lines, shifted_lines
from dunhamfit.lines.line_list import LineList, branch_label
from dunhamfit.lines.loops import Loop, band_name, list_loops, looped_bands, shifted_bands
from dunhamfit.lines.network import Network, adjust
from dunhamfit.lines.suspects import MOST_SUSPECTS, Finding, Suspect, Threshold
from dunhamfit.lines.unusable import refuse_unusable


@dataclass(frozen=True)
class Closure:
    """What the checks without a model found.

    Attributes
    ----------
    suspects : tuple of Suspect
        Lines, then bands; each followed by its rivals, if any.
    loops : tuple of Loop
        The independent loops and their closures, without the lines that are suspects.
    lines_tested, lines_unchecked : int
        Used lines that other lines check, and those that none does.
    bands_tested : int
        Bands (of one source each) that some loop runs along.
    false_alarms : float
        Probability that lists without errors, with uncertainties as stated, yield any suspect.
    critical : float
        |size/sigma| from which a line or band is a suspect.
    chi2, redundancy : float
        Weighted sum of squares of the differences check, all lines included, and its expectation.
    overflowing : tuple of str
        Isotopologues with more suspects than are listed: there the stated uncertainties do not hold.
    """

    suspects: tuple[Suspect, ...]
    loops: tuple[Loop, ...]
    lines_tested: int
    lines_unchecked: int
    bands_tested: int
    false_alarms: float
    critical: float
    chi2: float
    redundancy: float
    overflowing: tuple[str, ...]


def check_closure(lines: LineList, *, false_alarms: float = 0.01) -> Closure:
    """Check lines against each other, without a model.

    Parameters
    ----------
    lines : LineList
        Excluded lines take no part.
    false_alarms : float
        Probability of any false suspect in the whole list, shared among all tests (Bonferroni).

    Raises
    ------
    UsageError
        If `false_alarms` is not between 0 and 1, or a used line has no finite position or no positive sigma.
    """
    if not 0.0 < false_alarms < 1.0:
        raise UsageError(f"'false_alarms' must be between 0 and 1 (got {false_alarms})")
    refuse_unusable(lines)
    codes = np.unique(lines.isotopologue[lines.used])
    networks = [adjust(lines, np.flatnonzero(lines.used & (lines.isotopologue == code))) for code in codes]
    lines_tested = sum(int(np.sum(checked_lines(network))) for network in networks)
    bands_tested = sum(len(looped_bands(network)) for network in networks)
    threshold = Threshold(false_alarms, lines_tested + bands_tested)

    line_suspects, band_suspects, loops, overflowing = [], [], [], []
    for network in networks:
        found = shifted_lines(network, threshold)
        line_suspects += [_line_suspect(lines, network, item) for item in found]
        if len(found) >= MOST_SUSPECTS:
            overflowing.append(lines.isotopologues[lines.isotopologue[network.lines[0]]])
        trusted = np.delete(network.lines, [item.number for item in found])
        if len(trusted):
            clean = adjust(lines, trusted) if found else network
            loops += list_loops(lines, clean)
            shifted = shifted_bands(lines, clean, threshold)
            band_suspects += [_band_suspect(lines, clean, item) for item in shifted]
    return Closure(
        suspects=(*line_suspects, *band_suspects),
        loops=tuple(loops),
        lines_tested=lines_tested,
        lines_unchecked=int(np.sum(lines.used)) - lines_tested,
        bands_tested=bands_tested,
        false_alarms=false_alarms,
        critical=threshold.critical,
        chi2=sum(float(network.residual @ network.residual) for network in networks),
        redundancy=sum(float(np.sum(network.redundancy)) for network in networks),
        overflowing=tuple(overflowing),
    )


def _line_suspect(lines: LineList, network: Network, item: Finding) -> Suspect:
    index = int(network.lines[item.number])
    scale = float(lines.sigma[index])
    return Suspect(
        isotopologue=lines.isotopologues[lines.isotopologue[index]],
        band=f"{lines.v_upper[index]}-{lines.v_lower[index]}",
        line=branch_label(int(lines.j_upper[index]), int(lines.j_lower[index])),
        size=item.size * scale,
        sigma=item.sigma * scale,
        check="differences",
        place=lines.place(index),
        rivals=tuple(
            f"{lines.label(other)} ({lines.place(other)})" for other in network.lines[list(item.rivals)]
        ),
        index=index,
    )


def _band_suspect(lines: LineList, network: Network, item: Finding) -> Suspect:
    sources = [lines.sources[code].name for code in network.bands.source]
    return Suspect(
        isotopologue=lines.isotopologues[lines.isotopologue[network.lines[0]]],
        band=band_name(network, item.number),
        line="",
        size=item.size,
        sigma=item.sigma,
        check="loops",
        place=sources[item.number],
        rivals=tuple(f"{band_name(network, k)} ({sources[k]})" for k in item.rivals),
    )
