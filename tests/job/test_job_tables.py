# ruff: noqa: E501 - messages stand in one piece, so that they can be searched for
"""The job file: every wrong key or value is told with its table, and right ones become objects."""

from __future__ import annotations

import math
from pathlib import Path

import pytest

from dunhamfit.errors import UsageError
from dunhamfit.job.run import job_lines, read_job_lines
from dunhamfit.job.tables import parse_job, read_job

GOOD = """
title = "bench"
[molecule]
reference = "28Si32S"
[[source]]
name = "one"
file = "one.csv"
isotopologue = "28Si32S"
uncertainty = 1e-3
offset = "free"
scale = 5e-8
[model]
terms = [1, 0]
"""
LINES = "position,v_upper,v_lower,j_upper,j_lower\n744.3,1,0,1,0\n745.2,1,0,2,1\n746.1,1,0,3,2\n"


def said(text: str) -> str:
    with pytest.raises(UsageError) as caught:
        parse_job(text, Path("bench.toml"))
    return str(caught.value)


def test_what_is_right_is_understood():
    job = parse_job(GOOD, Path("folder/bench.toml"))
    assert job.archive == Path("folder/bench.h5")
    assert [term.name for term in job.terms] == ["Y10", "Y01"]
    assert (job.sources[0].offset, job.sources[0].scale) == (math.inf, 5e-8)
    assert (job.policy, job.robust) == ("stated", "none")


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ("uncertainty =", "uncertainy =", "bench.toml: [[source]] \"one\": 'uncertainy' is not known; did you mean 'uncertainty'?"),
        ("[model]\nterms = [1, 0]", "", "bench.toml: [model] terms is missing; give the highest k for l = 0, 1, 2, ..., such as terms = [4, 3, 2, 1]"),
        ("terms = [1, 0]", 'terms = ["Z10"]', "bench.toml: 'Z10' is not a term; write Y and the two indices, such as Y21, or Y10,0 from index 10 on"),
        ("terms = [1, 0]", 'terms = ["Y00"]', "bench.toml: Y00 cannot be determined from transitions, since it drops out of every difference; remove it"),
        ('name = "one"\n', "", "bench.toml: [[source]] number 1: name is missing; each source needs one"),
        ('offset = "free"', 'offset = "none"', "bench.toml: [[source]] \"one\": offset must be a number or \"free\" (got 'none')"),
        ('reference = "28Si32S"', "", '[molecule] reference is missing; name the isotopologue whose constants are wanted, such as reference = "28Si32S"'),
        ("terms = [1, 0]", "terms = [1, 0]\n[errors]\npolicy = \"each\"", "bench.toml: error policy 'each' is not known; use one of stated, common, per-source, per-band"),
        ("terms = [1, 0]", "terms = [1, 0]\nbounds = { Y01 = 3 }", "bench.toml: [model] bounds.Y01 must be [lowest, highest] (got 3)"),
        ("terms = [1, 0]", "terms = [1, 0]\n[[exclude]]\nsource = \"two\"\nrows = [1]\nreason = \"x\"", "bench.toml: [[exclude]] number 1: source 'two' is not one of the job's sources"),
        ("terms = [1, 0]", "terms = [1, 0]\n[[exclude]]\nsource = \"one\"\nrows = [1]", "bench.toml: [[exclude]] number 1: a reason is needed; it is kept with the run"),
        ("[molecule]", "[molecule", "bench.toml: this is not valid TOML"),
    ],
)  # fmt: skip
def test_what_is_wrong_is_told(old, new, message):
    assert message in said(GOOD.replace(old, new))


def test_a_job_that_does_not_exist(tmp_path):
    with pytest.raises(UsageError, match="the job file does not exist; check its name and folder"):
        read_job(tmp_path / "none.toml")


def test_fixed_terms_belong_to_the_model():
    job = parse_job(GOOD + "fixed = { Y02 = -2.1e-7, Y11 = { value = -1.5e-3, sigma = 1e-5 } }\n", Path("bench.toml"))
    assert [term.name for term in job.terms] == ["Y10", "Y01", "Y11", "Y02"]
    assert job.priors["Y02"].sigma == 0.0
    assert job.priors["Y11"].sigma == 1e-5


def test_one_file_in_two_sources_is_a_fault(tmp_path):
    (tmp_path / "one.csv").write_text(LINES)
    second = '[[source]]\nname = "two"\nfile = "./one.csv"\nisotopologue = "28Si32S"\nuncertainty = 1e-3\n[model]'
    job = parse_job(GOOD.replace("[model]", second), tmp_path / "bench.toml")
    (fault,) = read_job_lines(job).faults
    assert str(fault) == (
        './one.csv: the file is listed twice, sources "one" and "two" both name it and its lines would count double, '
        "remove it from one of them"
    )


def test_exclusions_keep_their_reason_and_need_a_row(tmp_path):
    (tmp_path / "one.csv").write_text(LINES)
    table = '[[exclude]]\nsource = "one"\nrows = [{}]\nreason = "blend"\n'
    lines = job_lines(parse_job(GOOD + table.format(3), tmp_path / "bench.toml"))
    assert [lines.reasons[code] for code in lines.exclusion] == ["", "blend", ""]
    with pytest.raises(UsageError, match="exclude: source 'one' has no line on row 9 of its file"):
        job_lines(parse_job(GOOD + table.format(9), tmp_path / "bench.toml"))
