"""What a chain was made for, as digests: a chain is continued only for the same lines, terms and error model."""

from __future__ import annotations

import hashlib

import numpy as np

from dunhamfit.errors import UsageError
from dunhamfit.fit.record import Fit

_COLUMNS = ("position", "sigma", "v_upper", "j_upper", "v_lower", "j_lower")


def identity(fit: Fit, *, error_model: str, factor_range: tuple[float, float]) -> dict[str, str]:
    """SHA-256 of the lines, the terms and the error model of a posterior, by those names."""
    return {
        "lines": _lines(fit),
        "terms": _terms(fit),
        "error model": _errors(fit, error_model, factor_range),
    }


def check_same(stored: dict[str, str], now: dict[str, str]) -> None:
    """Raise UsageError, which says what has changed, if a chain was made for something else."""
    changed = [name for name, digest in now.items() if stored.get(name) != digest]
    if changed:
        raise UsageError(
            f"the stored posterior belongs to another fit: the {' and the '.join(changed)} "
            f"{'has' if changed == ['error model'] else 'have'} changed since. Start a new one instead of continuing it"
        )


def _digest(*parts) -> str:
    """Digest of arrays and texts; each part is preceded by its length, so that none runs into the next."""
    whole = hashlib.sha256()
    for part in parts:
        content = np.ascontiguousarray(part).tobytes() if isinstance(part, np.ndarray) else repr(part).encode()
        whole.update(f"{len(content)}:".encode())
        whole.update(content)
    return whole.hexdigest()


def _lines(fit: Fit) -> str:
    lines = fit.lines
    used = lines.used
    names = [lines.isotopologues[code] for code in lines.isotopologue[used]]
    sources = [lines.sources[code].name for code in lines.source[used]]
    return _digest(*(getattr(lines, name)[used] for name in _COLUMNS), names, sources)


def _terms(fit: Fit) -> str:
    model = fit.model
    priors = [(item.name, model.prior(item)) for item in model.parameters]
    present = sorted({fit.lines.isotopologues[code] for code in fit.groups.isotopologue})
    masses = [model.mass_factors(name) for name in present]
    described = [(name, None if prior is None else (float(prior.value), float(prior.sigma))) for name, prior in priors]
    return _digest(model.reference.name, described, present, *masses)


def _errors(fit: Fit, error_model: str, factor_range: tuple[float, float]) -> str:
    noise = fit.noise
    return _digest(error_model, tuple(map(float, factor_range)), noise.policy, tuple(noise.names), noise.determined)
