r"""Two sets of constants beside each other: constant by constant, and line by line.

What a difference of two values may be by chance depends on what the two fits share:

    further lines alone           C_old - C_new (J. A. Hausman, Econometrica 46, 1251 (1978); from memory)
    further terms alone           C_wide - C_narrow, if the further terms are zero in truth
    no line in common             C_old + C_new
    anything else                 not known; no number is given
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from dunhamfit.fit.design import calculate
from dunhamfit.fit.record import Fit
from dunhamfit.lines.line_list import LineList
from dunhamfit.results.derived import CONVENTIONAL
from dunhamfit.results.given import ConstantSet

FURTHER_LINES, FURTHER_TERMS = "further lines", "further terms"
INDEPENDENT, SHARED, SAME = "independent", "shared lines", "same fit"
_WORDS = {
    FURTHER_LINES: "the new fit holds every line of the old one: sigma of a shift is sqrt(C_old - C_new)",
    FURTHER_TERMS: "the same lines with further terms: sigma of a shift is sqrt(C_wide - C_narrow)",
    INDEPENDENT: "taken as independent: sigma of a shift is sqrt(C_old + C_new)",
    SHARED: "the two share lines and differ in more than lines or terms: the sigma of a shift is not known",
    SAME: "the same lines, terms and error policy",
}
# Opposite signs count as a convention where the sizes agree within this factor, and where the value is
# this many sigma from zero.
_SIZE, _LEAST_T = 2.0, 3.0
# Part of a variance that rounding and the estimate of noise factors may move.
_NOTHING = 1e-6


@dataclass(frozen=True)
class ConstantChange:
    """One constant in both sets.

    Attributes
    ----------
    name : str
    old, new, shift : float, cm-1
    sigma_shift : float, cm-1
        NaN where it is not known; `why` then says why.
    sigma_old, sigma_new : float, cm-1
        NaN where not known.
    why : str
    """

    name: str
    old: float
    new: float
    shift: float
    sigma_shift: float
    sigma_old: float
    sigma_new: float
    why: str = ""


@dataclass(frozen=True)
class BandChange:
    """How the calculated lines of one band moved; new less old, cm-1."""

    isotopologue: str
    v_upper: int
    v_lower: int
    lines: int
    largest: float
    rms: float
    mean: float
    rms_in_sigma: float


@dataclass(frozen=True)
class LineChanges:
    """How the calculated positions of the used lines moved; new less old, cm-1.

    Attributes
    ----------
    lines, left_out : int
        Lines compared, and lines of isotopologues that one of the sets says nothing about.
    largest : float
        With its sign; of the line `where`.
    where : str
    rms : float
    rms_in_sigma : float
        Against the stated uncertainties of the lines.
    bands : tuple of BandChange
    """

    lines: int
    left_out: int
    largest: float
    where: str
    rms: float
    rms_in_sigma: float
    bands: tuple[BandChange, ...]


@dataclass(frozen=True)
class SignMismatch:
    """A constant whose two values have one size and opposite signs.

    Attributes
    ----------
    name : str
    old, new : float, cm-1
    text : str
        What that looks like.
    """

    name: str
    old: float
    new: float
    text: str


@dataclass(frozen=True)
class Comparison:
    """Two sets of constants beside each other.

    Attributes
    ----------
    old, new : str
        What is compared.
    relation : str
        One of the words of this module; `words` says what it means.
    constants : tuple of ConstantChange
    only_old, only_new : tuple of (name, value in cm-1)
        Constants that the other set does not have.
    signs : tuple of SignMismatch
    lines : LineChanges
    lines_turned : LineChanges or None
        The same with the signs of the mismatches turned in the old set; None where there are none.
    """

    old: str
    new: str
    relation: str
    constants: tuple[ConstantChange, ...]
    only_old: tuple[tuple[str, float], ...]
    only_new: tuple[tuple[str, float], ...]
    signs: tuple[SignMismatch, ...]
    lines: LineChanges
    lines_turned: LineChanges | None

    @property
    def words(self) -> str:
        return _WORDS[self.relation]


def compare(old: ConstantSet, new: ConstantSet, lines: LineList, *, relation: str = INDEPENDENT) -> Comparison:
    """Compare two sets of constants of one isotopologue.

    Parameters
    ----------
    old, new : ConstantSet
    lines : LineList
        Its used lines are calculated with both.
    relation : str
        As `relation_of` finds it for two fits.
    """
    at_old, at_new = _by_name(old), _by_name(new)
    shared = [name for name in new.names if name in at_old]
    changes = tuple(_change(name, at_old[name], at_new[name], relation) for name in shared)
    signs = tuple(found for name in shared if (found := _sign(name, at_old[name], at_new[name])))
    turned = None
    if signs:
        wrong = {item.name for item in signs}
        values = np.array([-v if n in wrong else v for n, v in zip(old.names, old.values, strict=True)])
        turned = line_changes(ConstantSet(old.label, old.model, values, old.sigmas), new, lines)
    return Comparison(
        old=old.label,
        new=new.label,
        relation=relation,
        constants=changes,
        only_old=tuple((name, value) for name, (value, _) in at_old.items() if name not in at_new),
        only_new=tuple((name, value) for name, (value, _) in at_new.items() if name not in at_old),
        signs=signs,
        lines=line_changes(old, new, lines),
        lines_turned=turned,
    )


def relation_of(old: Fit, new: Fit) -> str:
    """What two fits share, as one of the words of this module."""
    names = [{source.name: code for code, source in enumerate(fit.lines.sources)} for fit in (old, new)]
    digests = [{d for source in fit.lines.sources for d in source.digests if d} for fit in (old, new)]
    if not (names[0].keys() & names[1].keys()) and not (digests[0] & digests[1]):
        return INDEPENDENT
    held = all(name in names[1] and _same_lines(old, code, new, names[1][name]) for name, code in names[0].items())
    if not held or (old.noise.policy, old.robust) != (new.noise.policy, new.robust):
        return SHARED
    constants = [{item.name for item in fit.constants} for fit in (old, new)]
    alike = constants[0] == constants[1]
    if len(names[0]) < len(names[1]):
        return FURTHER_LINES if alike else SHARED
    if alike:
        return SAME
    nested = constants[0] < constants[1] or constants[1] < constants[0]
    return FURTHER_TERMS if nested else SHARED


def line_changes(old: ConstantSet, new: ConstantSet, lines: LineList) -> LineChanges:
    """Calculate the used lines with both sets; without breakdown terms a set speaks for its isotopologue alone."""
    known = np.array([_speaks_for(old, name) and _speaks_for(new, name) for name in lines.isotopologues])
    chosen = lines.used & known[lines.isotopologue]
    left_out = int((lines.used & ~chosen).sum())
    if not chosen.any():
        return LineChanges(0, left_out, float("nan"), "", float("nan"), float("nan"), ())
    picked = lines.subset(chosen)
    first, second = (calculate(item.model, picked, item.values) for item in (old, new))
    moved = (second.high - first.high) + (second.low - first.low)
    worst = int(np.argmax(np.abs(moved)))
    keys = np.stack([picked.isotopologue, picked.v_upper, picked.v_lower])
    bands, member = np.unique(keys, axis=1, return_inverse=True)
    found = []
    for number, (code, v_upper, v_lower) in enumerate(bands.T):
        of_band = member == number
        own = moved[of_band]
        found.append(
            BandChange(
                isotopologue=lines.isotopologues[code],
                v_upper=int(v_upper),
                v_lower=int(v_lower),
                lines=len(own),
                largest=float(own[np.argmax(np.abs(own))]),
                rms=_rms(own),
                mean=float(own.mean()),
                rms_in_sigma=_rms(own / picked.sigma[of_band]),
            )
        )
    return LineChanges(
        lines=len(moved),
        left_out=left_out,
        largest=float(moved[worst]),
        where=picked.label(worst),
        rms=_rms(moved),
        rms_in_sigma=_rms(moved / picked.sigma),
        bands=tuple(found),
    )


def _by_name(item: ConstantSet) -> Mapping[str, tuple[float, float]]:
    pairs = zip(item.values.tolist(), item.sigmas.tolist(), strict=True)
    return dict(zip(item.names, pairs, strict=True))


def _change(name: str, old: tuple[float, float], new: tuple[float, float], relation: str) -> ConstantChange:
    (value_old, sigma_old), (value_new, sigma_new) = old, new
    shift, why, sigma = value_new - value_old, "", float("nan")
    if relation == INDEPENDENT:
        known = [s for s in (sigma_old, sigma_new) if np.isfinite(s)]
        sigma = float(np.sqrt(sum(s * s for s in known))) if known else float("nan")
        if len(known) < 2:
            why = "one sigma is not known" if known else "no sigma is known"
    elif relation in (FURTHER_LINES, FURTHER_TERMS):
        lost = (sigma_old - sigma_new) * (sigma_old + sigma_new)
        lost = abs(lost) if relation == FURTHER_TERMS else lost
        if lost > _NOTHING * sigma_old**2:
            sigma = float(np.sqrt(lost))
        else:
            why = "its sigma has grown: the noise factors have" if lost < 0 else "its sigma is the same"
    elif relation == SHARED:
        why = _WORDS[SHARED]
    return ConstantChange(name, value_old, value_new, shift, sigma, sigma_old, sigma_new, why)


def _sign(name: str, old: tuple[float, float], new: tuple[float, float]) -> SignMismatch | None:
    """A mismatch, if the two values have opposite signs and much the same size."""
    value_old, value_new = old[0], new[0]
    if not value_old * value_new < 0 or not 1 / _SIZE < abs(value_old / value_new) < _SIZE:
        return None
    if any(np.isfinite(s) and abs(v) < _LEAST_T * s for v, s in (old, new)):
        return None
    conventional = next((c for c, k, l, sign, _ in CONVENTIONAL if sign < 0 and name == f"Y{k}{l}"), None)
    text = f"{name} has opposite signs in the two sets"
    if conventional:
        text += f"; one of them seems to give {conventional}, and {conventional} = -{name}"
    return SignMismatch(name, value_old, value_new, text)


def _speaks_for(item: ConstantSet, isotopologue: str) -> bool:
    model = item.model
    if not model.knows(isotopologue):
        return False
    return bool(model.breakdown) or model.isotopologue(isotopologue).formula == model.reference.formula


def _same_lines(old: Fit, old_code: int, new: Fit, new_code: int) -> bool:
    """Whether one source has the same used lines, with the same uncertainties, in both fits."""
    picked = [
        fit.lines.subset(fit.lines.used & (fit.lines.source == code))
        for fit, code in ((old, old_code), (new, new_code))
    ]
    columns = ("position", "sigma", "v_upper", "j_upper", "v_lower", "j_lower")
    return all(np.array_equal(getattr(picked[0], name), getattr(picked[1], name)) for name in columns)


def _rms(values: np.ndarray) -> float:
    return float(np.sqrt(np.mean(values**2)))
