"""The invented campaign of the package, fitted once into an archive."""

from __future__ import annotations

import shutil
from importlib.resources import files
from pathlib import Path

from dunhamfit.cli.main import main


def fitted_campaign(folder: Path, *policies: str) -> Path:
    """The archive with one run for each policy, "per-source" first if none is given."""
    for source in (Path(str(files("dunhamfit"))) / "examples" / "campaign").iterdir():
        shutil.copy(source, folder)
    job = folder / "sis.toml"
    text = job.read_text()
    for policy in policies or ("per-source",):
        job.write_text(text.replace('policy = "per-source"', f'policy = "{policy}"'))
        assert main(["fit", str(job), "--quiet"]) == 0
    return folder / "sis.h5"
