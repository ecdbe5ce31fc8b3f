"""The tour of the example's README: every command in it is run, in the order in which it stands."""

from __future__ import annotations

import csv
import os
import re
import shutil
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
import yaml

pytestmark = pytest.mark.workflow


@pytest.fixture(scope="module")
def steps(repository: Path) -> list[str]:
    """Blocks of commands of the tour."""
    text = (repository / "example_region" / "README.md").read_text(encoding="utf-8")
    tour = text[text.index("## A tour") : text.index("## What is awkward")]
    return re.findall(r"^```sh\n(.*?)^```$", tour, re.DOTALL | re.MULTILINE)


@pytest.fixture(scope="module")
def toured(
    steps: list[str],
    repository: Path,
    tmp_path_factory: pytest.TempPathFactory,
    copy_example: Callable[..., Path],
    quick_parts: dict[str, Any],
) -> tuple[Path, list[str]]:
    """A place that looks like the repository, after the tour, and what every block printed.

    The example there asks for few simulations: the tour is of the commands, not of the numbers.
    """
    place = tmp_path_factory.mktemp("tour of")
    for name in ("Snakefile", "profiles", "workflow", "config", "src"):
        (place / name).symlink_to(repository / name)
    copy_example(place / "example_region", **quick_parts)
    shutil.copy(repository / "example_region" / "peaks_later.csv", place / "example_region")
    program = Path(sys.executable).parent
    path = os.pathsep.join([str(program), os.environ["PATH"]])
    told = []
    for step in steps:
        ran = subprocess.run(
            ["sh", "-e", "-c", step],
            cwd=place,
            env={**os.environ, "PATH": path},
            stdout=subprocess.PIPE,
            stderr=subprocess.STDOUT,
            text=True,
        )
        assert ran.returncode == 0, f"{step}\n{ran.stdout}"
        assert "Traceback" not in ran.stdout, ran.stdout
        told.append(ran.stdout)
    return place / "tour", told


def rows(path: Path) -> list[dict[str, str]]:
    with path.open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


def test_raw_peaks_are_accounted_for_and_what_is_missing_is_told(toured: tuple[Path, list[str]]) -> None:
    tour, told = toured
    assert "not yet a study" in told[0]
    assert 6 == len(rows(tour / "begun" / "import_account.csv")), "two gauges, three years"
    assert 5 == len(rows(tour / "begun" / "peaks.csv")), "one cell was blank"


def test_decision_of_the_ledger_is_carried_out(toured: tuple[Path, list[str]]) -> None:
    tables = toured[0] / "vell" / "editions" / "2024" / "results" / "tables"
    (fate,) = [
        row
        for row in rows(tables / "record_accounting.csv")
        if (row["gauge_id"], row["water_year"]) == ("0410125", "2003")
    ]
    assert ("excluded", "ledger") == (fate["fate"], fate["decided_by"])
    (line,) = [row for row in rows(tables / "ledger.csv") if row["evidence"] == "field book 33"]
    assert line["effect"]


def test_first_edition_is_verified(steps: list[str], toured: tuple[Path, list[str]]) -> None:
    (verified,) = [told for step, told in zip(steps, toured[1], strict=True) if "--name 2024" in step]
    assert "2024" in verified


def test_new_site_is_estimated_from_the_saved_models(
    steps: list[str], toured: tuple[Path, list[str]]
) -> None:
    (estimated,) = [told for step, told in zip(steps, toured[1], strict=True) if "wrackline estimate" in step]
    assert "NEW1" in estimated


def test_second_edition_holds_one_more_year_and_is_compared(
    steps: list[str], toured: tuple[Path, list[str]]
) -> None:
    vell = toured[0] / "vell"
    years = [
        {row["water_year"] for row in rows(vell / "editions" / name / "inputs" / "peaks.csv")}
        for name in ("2024", "2025")
    ]
    assert {"2025"} == years[1] - years[0]
    compared = list((toured[0] / "compared").rglob("*.csv"))
    assert compared
    assert all(rows(path) for path in compared)
    assert yaml.safe_load((vell / "study.yaml").read_text(encoding="utf-8"))["pooling"]["simulations"] == 100
