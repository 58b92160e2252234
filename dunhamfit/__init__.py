"""dunhamfit: one set of Dunham coefficients from every band, isotopologue and instrument of a diatomic molecule.

Names are loaded when they are first used, so that `import dunhamfit` costs nothing.
"""

import importlib

__version__ = "0.1.0"

_HOME = {
    "LineList": "dunhamfit.lines.line_list",
    "Source": "dunhamfit.lines.line_list",
    "read_lines": "dunhamfit.lines.reading",
    "TermSet": "dunhamfit.molecule.terms",
    "Masses": "dunhamfit.molecule.masses",
    "Prior": "dunhamfit.fit.model",
    "Fit": "dunhamfit.fit.record",
    "fit_lines": "dunhamfit.fit.solve",
    "update_fit": "dunhamfit.fit.update",
    "check_closure": "dunhamfit.lines.closure",
    "check_arrival": "dunhamfit.inference.arrival",
    "select_terms": "dunhamfit.inference.selection",
    "find_systematics": "dunhamfit.inference.systematics",
    "leave_one_out": "dunhamfit.inference.resample",
    "bootstrap": "dunhamfit.inference.resample",
    "influence": "dunhamfit.inference.influence",
    "coverage": "dunhamfit.inference.simulate",
    "make_ledger": "dunhamfit.inference.ledger",
    "sample": "dunhamfit.inference.sampling",
    "to_lmfit": "dunhamfit.inference.handover",
    "to_dataset": "dunhamfit.inference.dataset",
    "predict": "dunhamfit.results.predict",
    "energy_levels": "dunhamfit.results.levels",
    "derive": "dunhamfit.results.derived",
    "compare": "dunhamfit.results.compare",
    "read_job": "dunhamfit.job.tables",
    "fit_job": "dunhamfit.job.run",
    "open_archive": "dunhamfit.archive.store",
    "DunhamfitError": "dunhamfit.errors",
    "DunhamfitWarning": "dunhamfit.errors",
}

__all__ = ["__version__", *_HOME]


def __getattr__(name: str):
    """Load a public name from its module (PEP 562)."""
    if name not in _HOME:
        raise AttributeError(f"module 'dunhamfit' has no attribute '{name}'")
    return getattr(importlib.import_module(_HOME[name]), name)


def __dir__() -> list[str]:
    return sorted(__all__)
