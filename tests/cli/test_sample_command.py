"""`sample`: total and more, going on after an interruption, and refusal of another model's chain."""

from __future__ import annotations

import json
import os
import shutil
import signal
import subprocess
import sys
import time
from importlib.resources import files
from pathlib import Path

import numpy as np
import pytest

from dunhamfit.archive.store import open_archive
from dunhamfit.cli.main import main
from dunhamfit.inference.storing import unpack


@pytest.fixture(scope="module")
def fitted(tmp_path_factory) -> Path:
    """The invented campaign with one run in its archive."""
    folder = tmp_path_factory.mktemp("sampled")
    for source in (Path(str(files("dunhamfit"))) / "examples" / "campaign").iterdir():
        shutil.copy(source, folder)
    assert main(["fit", str(folder / "sis.toml"), "--quiet"]) == 0
    return folder / "sis.h5"


@pytest.fixture
def archive(fitted, tmp_path) -> Path:
    return Path(shutil.copy(fitted, tmp_path / "own.h5"))


def chain(archive: Path) -> np.ndarray:
    with open_archive(archive) as store:
        return unpack(store.posterior(1)).chain


def test_more_goes_on_to_the_chain_of_one_total(archive, fitted, tmp_path):
    """Two calls make the same draws, bit for bit, as one."""
    whole = Path(shutil.copy(fitted, tmp_path / "whole.h5"))
    assert main(["sample", str(archive), "--seed", "7", "--total", "2048", "--quiet"]) in (0, 5)
    half = len(chain(archive))
    assert main(["sample", str(archive), "--more", "2048", "--quiet"]) in (0, 5)
    assert main(["sample", str(whole), "--seed", "7", "--total", "4096", "--quiet"]) in (0, 5)
    assert len(chain(archive)) == 2 * half
    assert np.array_equal(chain(archive), chain(whole))


def test_default_length_reaches_a_thousand_effective_draws(archive, capsys):
    capsys.readouterr()
    assert main(["sample", str(archive), "--seed", "1", "--json", "--quiet"]) == 0
    document = json.loads(capsys.readouterr().out)
    assert document["converged"]
    assert document["seed"] == 1
    assert min(item["ess"] for item in document["constants"]) >= 1000
    for item in document["constants"]:
        # The fit's Gaussian and the posterior differ by the noise factors' spread only: some per cent of sigma.
        assert abs(item["mean"] - item["fitted"]) < 0.15 * item["fitted_sigma"]
        assert item["sd"] == pytest.approx(item["fitted_sigma"], rel=0.1)
        assert item["q16"] < item["q50"] < item["q84"]


def test_total_and_more_exclude_each_other(archive, capsys):
    assert main(["sample", str(archive), "--total", "9", "--more", "9"]) == 2
    assert "--total N and --more N are different things" in capsys.readouterr().err


def test_a_chain_of_another_error_model_is_refused(archive, capsys):
    assert main(["sample", str(archive), "--seed", "1", "--total", "1024", "--quiet"]) in (0, 5)
    assert main(["sample", str(archive), "--model", "student", "--quiet"]) == 2
    assert "the error model has changed since" in capsys.readouterr().err


@pytest.mark.slow
def test_killed_sampling_loses_no_run_and_carries_on(fitted, tmp_path):
    """kill -9 at random moments; the chain that is carried on equals an undisturbed one."""
    whole = Path(shutil.copy(fitted, tmp_path / "whole.h5"))
    assert main(["sample", str(whole), "--seed", "5", "--total", "30000", "--quiet"]) in (0, 5)
    rng = np.random.default_rng(11)
    killed = Path(shutil.copy(fitted, tmp_path / "killed.h5"))
    call = [sys.executable, "-m", "dunhamfit.cli.main", "sample", str(killed), "--total", "30000", "--quiet"]
    for _ in range(5):
        process = subprocess.Popen(
            [*call, *([] if _side(killed) or _sampled(killed) else ["--seed", "5"])],
            env={**os.environ, "OPENBLAS_NUM_THREADS": "1"},
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
        )
        time.sleep(rng.uniform(0.5, 4.0))
        process.send_signal(signal.SIGKILL)
        process.wait()
        with open_archive(killed) as store:
            assert store.numbers() == (1,)
            store.load(1)
    seed = [] if _side(killed) or _sampled(killed) else ["--seed", "5"]
    assert main(["sample", str(killed), "--total", "30000", "--quiet", *seed]) in (0, 5)
    assert np.array_equal(chain(killed), chain(whole))


def _side(archive: Path) -> bool:
    return any(archive.with_name(f"{archive.name}.run1.samples").glob("*.npz"))


def _sampled(archive: Path) -> bool:
    with open_archive(archive) as store:
        return store.runs()[0].posterior


def test_blocks_that_the_archive_holds_already_are_not_taken_twice(archive, monkeypatch):
    """As after a kill between storing the chain and taking its blocks away."""
    monkeypatch.setattr("dunhamfit.archive.side_file.SideFile.remove", lambda self: None)
    assert main(["sample", str(archive), "--seed", "7", "--total", "2048", "--quiet"]) in (0, 5)
    once = chain(archive)
    assert main(["sample", str(archive), "--total", "2048", "--quiet"]) in (0, 5)
    assert np.array_equal(chain(archive), once)
