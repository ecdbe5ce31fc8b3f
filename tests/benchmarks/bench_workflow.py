"""What the workflow adds: overhead of a run, and a rerun with nothing changed, on the example region."""

from __future__ import annotations

import shutil
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

REPOSITORY = Path(__file__).resolve().parents[2]
EXAMPLE = REPOSITORY / "example_region"
STAGES = ("intake", "screen", "dependence", "pool", "regress", "validate", "estimate", "publish")
IN_ONE_PROCESS = (
    "import importlib, sys; from pathlib import Path\n"
    "from wrackline.stages.running import StudyFiles\n"
    "from wrackline.study.loading import load_config\n"
    "study = Path(sys.argv[1]).resolve()\n"
    f"for stage in {STAGES}:\n"
    "    importlib.import_module('wrackline.stages.' + stage).run(StudyFiles(load_config(study), study))\n"
)


def measure(repeats: int = 5) -> list[dict[str, Any]]:
    """Wall times, interleaved; wall, because waiting for processes to start is what is measured."""
    with tempfile.TemporaryDirectory() as name:
        place = Path(name)
        empty = place / "empty"
        empty.mkdir()
        (empty / "Snakefile").write_text("rule all:\n    input: []\n", encoding="utf-8")
        through, inside, again, nothing = [], [], [], []
        for number in range(repeats):
            study = copy_study(place / f"through_{number}")
            other = copy_study(place / f"inside_{number}")
            through.append(
                timed(lambda study=study: run([*snakemake(), "--configfile", str(study)], REPOSITORY))
            )
            inside.append(
                timed(lambda other=other: run([sys.executable, "-c", IN_ONE_PROCESS, str(other)], REPOSITORY))
            )
            again.append(
                timed(lambda study=study: run([*snakemake(), "--configfile", str(study)], REPOSITORY))
            )
            nothing.append(timed(lambda: run([*snakemake(), "--cores", "1"], empty)))
            shutil.rmtree(study.parent)
            shutil.rmtree(other.parent)
    return [
        row("workflow overhead", "example region", "the stages in one process", through, inside, 1.5),
        row(
            "rerun, nothing changed", "example region", "snakemake on an empty workflow", again, nothing, 2.0
        ),
    ]


def copy_study(folder: Path) -> Path:
    """Copy the example's inputs into a new folder; return the study file."""
    folder.mkdir()
    for path in EXAMPLE.iterdir():
        if path.suffix in {".csv", ".gpkg", ".yaml"}:
            shutil.copy(path, folder / path.name)
    return folder / "study.yaml"


def snakemake() -> list[str]:
    return [sys.executable, "-m", "snakemake"]


def run(command: list[str], folder: Path) -> None:
    subprocess.run(command, cwd=folder, check=True, capture_output=True)


def timed(work: Callable[[], None]) -> float:
    started = time.perf_counter()
    work()
    return time.perf_counter() - started


def row(
    kernel: str, size: str, floor: str, times: list[float], floors: list[float], target: float
) -> dict[str, Any]:
    """One line of the table: the ratio's median with its smallest and largest value."""
    ratios = [one / other for one, other in zip(times, floors, strict=True)]
    return {
        "kernel": kernel,
        "size": size,
        "floor": floor,
        "ratio": statistics.median(ratios),
        "ratio_min": min(ratios),
        "ratio_max": max(ratios),
        "target": f"at most {target:g}",
    }
