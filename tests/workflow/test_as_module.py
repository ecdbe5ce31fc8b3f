"""Another workflow takes this one as a module, for one study or for several."""

from __future__ import annotations

import re
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

pytestmark = pytest.mark.workflow

Run = Callable[..., "subprocess.CompletedProcess[str]"]
OUTER = """
module {name}:
    snakefile: "{snakefile}"
    prefix: "{folder}"
    config: {{"study_file": "{folder}/study.yaml"}}


use rule * from {name} as {name}_*
"""
DIGEST = """
rule count:
    default_target: True
    input: {inputs}
    output: "counts.txt"
    shell: "wc -l {{input:q}} > {{output}}"
"""


@pytest.fixture
def outer(
    tmp_path: Path, repository: Path, copy_example: Callable[..., Path], quick_parts: dict[str, Any]
) -> Callable[..., Path]:
    """Write an outer workflow over studies in the folders given by module; its own rule wants a file of each."""

    def write(wanted: str, **folders: str) -> Path:
        parts = [
            OUTER.format(name=name, snakefile=repository / "Snakefile", folder=folder)
            for name, folder in folders.items()
        ]
        inputs = ", ".join(f'"{folder}/{wanted}"' for folder in folders.values())
        for folder in folders.values():
            copy_example(tmp_path / folder, **quick_parts)
        (tmp_path / "Snakefile").write_text(
            "\n".join([*parts, DIGEST.format(inputs=inputs)]), encoding="utf-8"
        )
        return tmp_path

    return write


def snakemake(folder: Path, *options: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "snakemake", "--cores", "2", *options],
        cwd=folder,
        stdout=subprocess.PIPE,
        stderr=subprocess.STDOUT,
        text=True,
    )


def test_two_studies_run_side_by_side_in_their_own_folders(outer: Callable[..., Path]) -> None:
    folder = outer("work/screen/gauges.csv", north="the north", south="south/2026")
    run = snakemake(folder)
    assert run.returncode == 0, run.stdout
    counts = re.findall(r"^ *(\d+) (.+)$", (folder / "counts.txt").read_text(encoding="utf-8"), re.MULTILINE)
    assert ["the north/work/screen/gauges.csv", "south/2026/work/screen/gauges.csv", "total"] == [
        c[1] for c in counts
    ]
    assert "121" == counts[0][0] == counts[1][0]
    assert (
        (folder / "the north" / "work" / "logs" / "screen.log")
        .read_text(encoding="utf-8")
        .startswith("screen: ")
    )
    assert not (folder / "work").exists()

    again = snakemake(folder)
    assert again.returncode == 0
    assert "Nothing to be done" in again.stdout

    peaks = folder / "south" / "2026" / "peaks.csv"
    peaks.write_text(
        "".join(peaks.read_text(encoding="utf-8").splitlines(keepends=True)[:-1]), encoding="utf-8"
    )
    planned = snakemake(folder, "--dry-run")
    assert "south_intake" in planned.stdout
    assert "north_intake" not in planned.stdout


def test_results_can_be_wanted_by_the_outer_workflow(outer: Callable[..., Path]) -> None:
    planned = snakemake(outer("results/report.html", floods="floods"), "--dry-run")
    assert planned.returncode == 0, planned.stdout
    assert re.search(r"^floods_publish +1$", planned.stdout, re.MULTILINE)


def test_failure_of_a_stage_fails_the_outer_workflow_with_its_words(outer: Callable[..., Path]) -> None:
    folder = outer("work/screen/gauges.csv", floods="floods")
    peaks = folder / "floods" / "peaks.csv"
    peaks.write_text(peaks.read_text(encoding="utf-8") + "x,y,z\n", encoding="utf-8")
    run = snakemake(folder)
    assert run.returncode == 1
    assert "peaks.csv, row " in run.stdout
    assert "intake" == (folder / "floods" / "work" / "logs" / "failed").read_text(encoding="utf-8").strip()


def test_module_without_a_study_says_what_to_write(tmp_path: Path, repository: Path) -> None:
    (tmp_path / "Snakefile").write_text(
        f'module floods:\n    snakefile: "{repository / "Snakefile"}"\n\nuse rule * from floods\n',
        encoding="utf-8",
    )
    run = snakemake(tmp_path, "--dry-run")
    assert run.returncode == 1
    assert 'config: {"study_file": "FOLDER/study.yaml"}' in run.stdout
    assert "Traceback" not in run.stdout
