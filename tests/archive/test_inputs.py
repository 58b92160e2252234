"""The text that says what a run was made from, and whose hash is its identity."""

from __future__ import annotations

import dataclasses
import json
from decimal import Decimal

import numpy as np
import pytest
from invented_runs import REFERENCE, TERMS, all_lines, one_fit

from dunhamfit.archive.inputs import as_text, inputs_document, model_of, source_of
from dunhamfit.errors import UsageError
from dunhamfit.fit.solve import fit_lines
from dunhamfit.lines.line_list import Source
from dunhamfit.molecule.masses import Mass, Masses


def document_of(fit):
    return json.loads(as_text(inputs_document(fit, stretches=[], order="", origin={})))


def test_the_text_is_strict_json_in_one_order(fit):
    text = as_text({"b": 0.1 + 0.2, "a": "\u00b5\n", "c": [1, None, True]})
    assert text == '{"a": "\\u00b5\\n", "b": 0.30000000000000004, "c": [1, null, true]}'  # RFC 8259
    for wrong in (float("inf"), object(), {1, 2}, b"x"):
        with pytest.raises(UsageError, match="texts, finite numbers, lists and mappings only"):
            as_text({"x": wrong})


@pytest.mark.parametrize("sigma", [1e-5, np.float64(1e-5), np.inf, 3, None])
def test_sources_come_back(fit, sigma):
    source = Source("free", ("free", "b"), ("00",), "THz", 2.0, sigma, sigma)
    lines = dataclasses.replace(fit.lines, sources=(source, fit.lines.sources[1]))
    found = document_of(dataclasses.replace(fit, lines=lines))["sources"]
    assert source_of(found[0]) == source
    if sigma == np.inf:
        assert (found[0]["offset"], found[0]["name"]) == ("free", "free")


def test_masses_used_and_own_masses_come_back():
    masses = Masses.ame2020().with_own({"73Ge": Decimal("72.95"), "72Ge": ("71.922", 1e-6)})
    fit = fit_lines(all_lines(), TERMS, reference=REFERENCE, masses=masses)
    document = document_of(fit)
    # 72Ge and 80Se by the lines, 74Ge and 80Se by the reference, 73Ge since it is not the evaluation's.
    assert set(document["masses"]) == {"72Ge", "73Ge", "74Ge", "80Se"}
    model = model_of(document)
    for name in (*document["masses"], "70Ge", "1H"):
        assert model.masses[name] == masses[name]
    assert model.masses["72Ge"] == Mass(Decimal("71.922"), 1e-6, "own")


def test_masses_of_the_run_win_over_those_of_a_later_evaluation(fit):
    document = document_of(fit)
    document["masses"]["80Se"] = {"value": "79.9165", "sigma": 2e-6, "source": "AME2003"}
    model = model_of(document)
    assert model.reference.masses[1] == Mass(Decimal("79.9165"), 2e-6, "AME2003")


def test_equal_models_have_equal_texts():
    first, second = one_fit(), one_fit()
    assert document_of(first) == document_of(second)
    assert document_of(first) != document_of(one_fit("common"))
