"""What `export` writes for other programs: constants, covariance and lines at full precision, and a job
file that reads them back to the same fit."""

from __future__ import annotations

import json
import re
from collections.abc import Mapping

import numpy as np

from dunhamfit.fit.record import Fit
from dunhamfit.molecule.terms import indices
from dunhamfit.show.tables import records_to_csv

# The first columns bear the names that the reader knows, so that the files need no column map.
_NUMBERS = ("v_upper", "j_upper", "v_lower", "j_lower")


def constants_csv(fit: Fit) -> str:
    """Constants, one a line, at full precision."""
    return records_to_csv(
        [
            {
                "name": item.name,
                "kind": item.kind,
                "k": item.k,
                "l": item.l,
                "atom": item.atom,
                "value": float(fit.values[index]),
                "sigma": float(fit.sigmas[index]),
                "unit": item.unit,
                "fixed_from": fit.origins.get(item.name, ""),
            }
            for index, item in enumerate(fit.constants)
        ]
    )


def covariance_csv(fit: Fit) -> str:
    """Covariance of all parameters, calibration terms included, at full precision; cm-1 squared."""
    names = [item.name for item in fit.model.parameters]
    return records_to_csv(
        [
            {"parameter": name, **{other: float(entry) for other, entry in zip(names, row, strict=True)}}
            for name, row in zip(names, fit.parameter_covariance, strict=True)
        ]
    )


def line_files(fit: Fit) -> dict[str, str]:
    """A CSV file of each source, by file name: lines with residuals; `row` is the place in the file read first.

    Lines of isotopologues outside the molecule's are not listed: the model says nothing of them.
    """
    factor = np.full(len(fit.lines), np.nan)
    factor[fit.design.used] = fit.noise.by_group[fit.design.group_of]
    weights = np.ones(len(fit.lines)) if fit.line_weights is None else fit.line_weights
    files = {}
    for code, name in enumerate(_file_names(fit)):
        records = [_line_record(fit, i, factor, weights) for i in _listed_lines(fit, code)]
        files[name] = records_to_csv(records)
    return files


def _line_record(fit: Fit, i: int, factor: np.ndarray, weights: np.ndarray) -> dict[str, object]:
    lines = fit.lines
    residual = float(fit.residuals[i])
    return {
        "isotopologue": lines.isotopologues[lines.isotopologue[i]],
        **{name: int(getattr(lines, name)[i]) for name in _NUMBERS},
        "position": float(lines.position[i]),
        "uncertainty": float(lines.sigma[i]),
        "calculated": float(lines.position[i]) - residual,
        "obs_minus_calc": residual,
        "noise_factor": None if np.isnan(factor[i]) else float(factor[i]),
        "robust_weight": float(weights[i]),
        "flag": "used" if lines.used[i] else "excluded",
        "reason": lines.reasons[lines.exclusion[i]],
        "source": lines.sources[lines.source[i]].name,
        "read_from": lines.place(i),
    }


def job_text(fit: Fit, *, title: str, extra_model: Mapping[str, object] | None = None) -> str:
    """A job file for the files of `line_files` that makes the same fit.

    Parameters
    ----------
    fit : Fit
    title : str
    extra_model : mapping, optional
        Further keys of `[model]`, such as relations.
    """
    model, parts = fit.model, [f"title = {_quoted(title)}", "", "[molecule]"]
    parts.append(f"reference = {_quoted(model.reference.name)}")
    own = {name: mass for name, mass in model.masses.items() if mass.source == "own"}
    if own:
        entries = (f"{_quoted(name)} = [{float(mass.value)!r}, {mass.sigma!r}]" for name, mass in own.items())
        parts.append(f"masses = {{ {', '.join(entries)} }}")
    for code, name in enumerate(_file_names(fit)):
        parts += _source_tables(fit, code, name)
    parts += ["", "[model]", f"terms = {_value(list(model.terms.names))}"]
    breakdown: dict[str, list[str]] = {}
    for item in model.constants:
        if item.atom:
            breakdown.setdefault(item.atom, []).append(indices(item.k, item.l))
    extras = {"breakdown": breakdown, "fixed": _fixed(fit), **(extra_model or {})}
    parts += [f"{key} = {_value(value)}" for key, value in extras.items() if value]
    parts += ["", "[errors]", f"policy = {_quoted(fit.noise.policy)}", f"robust = {_quoted(fit.robust)}", ""]
    return "\n".join(parts)


def _source_tables(fit: Fit, code: int, name: str) -> list[str]:
    source, lines = fit.lines.sources[code], fit.lines
    parts = ["", "[[source]]", f"name = {_quoted(source.name)}", f"file = {_quoted(name)}"]
    parts += ['format = "delimited"', 'delimiter = "comma"', 'unit = "cm-1"', "coverage_factor = 1"]
    parts += ['repeats = "both"', "allow_high_j = true"]
    for kind in ("offset", "scale"):
        sigma = getattr(source, kind)
        if sigma is not None:
            parts.append(f"{kind} = {repr(sigma) if np.isfinite(sigma) else _quoted('free')}")
    rows: dict[str, list[int]] = {}
    for row, i in enumerate(_listed_lines(fit, code), start=2):  # row 1 is the header
        if not lines.used[i]:
            rows.setdefault(lines.reasons[lines.exclusion[i]], []).append(row)
    for reason, numbers in rows.items():
        parts += ["", "[[exclude]]", f"source = {_quoted(source.name)}", f"rows = {numbers}"]
        parts.append(f"reason = {_quoted(reason)}")
    return parts


def _listed_lines(fit: Fit, code: int) -> np.ndarray:
    known = np.array([fit.model.knows(name) for name in fit.lines.isotopologues], dtype=bool)
    return np.flatnonzero((fit.lines.source == code) & known[fit.lines.isotopologue])


def _file_names(fit: Fit) -> list[str]:
    """File name of each source: its name without what a file system could mistake."""
    return [
        f"lines-{code + 1}-{re.sub(r'[^A-Za-z0-9._-]+', '-', source.name)[:60]}.csv"
        for code, source in enumerate(fit.lines.sources)
    ]


def _fixed(fit: Fit) -> dict[str, object]:
    return {
        name: {"value": prior.value, "sigma": prior.sigma, **({"from": prior.origin} if prior.origin else {})}
        for name, prior in fit.model.priors.items()
    }


def _quoted(text: str) -> str:
    """A TOML basic string; its escapes are those of JSON."""
    return json.dumps(text)


def _value(value: object) -> str:
    if isinstance(value, Mapping):
        return "{ " + ", ".join(f"{_quoted(str(k))} = {_value(v)}" for k, v in value.items()) + " }"
    if isinstance(value, (list, tuple)):
        return "[" + ", ".join(_value(item) for item in value) + "]"
    return _quoted(value) if isinstance(value, str) else repr(value)
