"""Fixtures of the archive tests."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest
from invented_runs import one_fit

from dunhamfit.archive.store import open_archive
from dunhamfit.fit.record import Fit

ROOT = Path(__file__).resolve().parents[2]


@pytest.fixture(scope="session")
def fit() -> Fit:
    return one_fit()


@pytest.fixture
def path(tmp_path, fit) -> Path:
    """An archive with two runs, the second after the first."""
    path = tmp_path / "runs.h5"
    with open_archive(path, mode="a") as archive:
        archive.save(fit, title="first", job_text="title = 'first'\n", notices=("a notice",))
        archive.save(one_fit("stated"), title="second", parent=1)
    return path


@pytest.fixture
def program():
    """Start another Python with a program that can import dunhamfit and these tests; it is killed in the end."""
    started = []

    def start(text: str, *arguments: object) -> subprocess.Popen:
        head = f"import sys\nsys.path[:0] = [{str(ROOT)!r}, {str(Path(__file__).parent)!r}]\n"
        process = subprocess.Popen(
            [sys.executable, "-c", head + text, *map(str, arguments)],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
        )
        started.append(process)
        return process

    yield start
    for process in started:
        process.kill()
        process.communicate()
