"""What tests of every room may need: the repository's place, and copies of the example study to work on."""

from __future__ import annotations

import shutil
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
import yaml

REPOSITORY = Path(__file__).resolve().parents[1]
EXAMPLE = REPOSITORY / "example_region"


@pytest.fixture(scope="session")
def repository() -> Path:
    return REPOSITORY


@pytest.fixture(scope="session")
def copy_example() -> Callable[..., Path]:
    """Copy the example study into a folder; keyword arguments replace whole parts' keys of its study file."""

    def copy(folder: Path, **changes: dict[str, Any]) -> Path:
        folder.mkdir(parents=True)
        for path in sorted(EXAMPLE.iterdir()):
            if path.suffix in {".csv", ".gpkg", ".yaml"}:
                shutil.copy(path, folder / path.name)
        study = folder / "study.yaml"
        if changes:
            content = yaml.safe_load(study.read_text(encoding="utf-8"))
            for part, keys in changes.items():
                content[part] = {**content.get(part, {}), **keys} if isinstance(keys, dict) else keys
            study.write_text(yaml.safe_dump(content, allow_unicode=True, sort_keys=False), encoding="utf-8")
        return study

    return copy


@pytest.fixture(scope="session")
def quick_parts() -> dict[str, dict[str, Any]]:
    """What makes a whole study quick, for tests of the workflow that do not look at its numbers."""
    few = {"simulations": 100, "close_call_simulations": 100, "growth_simulations": 100, "compare": []}
    return {"pooling": few, "at_site": {"alternatives": False}}


@pytest.fixture(scope="session")
def run_workflow() -> Callable[..., subprocess.CompletedProcess[str]]:
    """Run the workflow on a study as the README says, from the repository's root; give back what it printed."""

    def run(study: Path, *options: str) -> subprocess.CompletedProcess[str]:
        command = [sys.executable, "-m", "snakemake", "--configfile", str(study), *options]
        return subprocess.run(
            command, cwd=REPOSITORY, stdout=subprocess.PIPE, stderr=subprocess.STDOUT, text=True, timeout=600
        )

    return run
