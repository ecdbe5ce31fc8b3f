"""The example study through the whole workflow, as the README tells a user to run it."""

from __future__ import annotations

import csv
import json
import os
import random
import re
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

pytestmark = pytest.mark.workflow

Run = Callable[..., "subprocess.CompletedProcess[str]"]
STAGES = [
    "intake", "screen", "dependence", "atsite", "skew", "weight", "pool", "regress", "validate", "estimate", "publish",
]  # fmt: skip
"""Few simulations: these tests are of the workflow, not of the numbers."""


def stages_run(output: str) -> list[str]:
    return re.findall(r"^\[\d+ of \d+\] (\w+) \.\.\.$", output, re.MULTILINE)


def tables(study: Path) -> dict[str, bytes]:
    return {path.name: path.read_bytes() for path in sorted((study.parent / "results" / "tables").iterdir())}


@pytest.fixture(scope="module")
def finished(
    tmp_path_factory: pytest.TempPathFactory,
    copy_example: Callable[..., Path],
    quick_parts: dict[str, Any],
    run_workflow: Run,
) -> tuple[Path, str]:
    """The example, run with two cores in a folder whose path has blanks and letters of three scripts."""
    study = copy_example(tmp_path_factory.mktemp("a study") / "Überflutung 洪水 {наводнение}", **quick_parts)
    run = run_workflow(study, "--cores", "2")
    assert 0 == run.returncode, run.stdout
    return study, run.stdout


def test_run_tells_every_stage_and_where_the_results_lie(finished: tuple[Path, str]) -> None:
    study, output = finished
    # What does not wait for each other may start in any order.
    assert sorted(STAGES) == sorted(stages_run(output))
    for stage in STAGES:
        assert re.search(rf"^{stage}: .+ \(\d+\.\d s\)$", output, re.MULTILINE), stage
    for place in ("report.html", "tables", "maps", "manifest.json"):
        assert str(study.parent / "results" / place) in output
        assert (study.parent / "results" / place).exists()
    assert "Traceback" not in output


def test_manifest_names_everything_that_lies_in_the_results(finished: tuple[Path, str]) -> None:
    results = finished[0].parent / "results"
    named = set(json.loads((results / "manifest.json").read_text(encoding="utf-8"))["outputs"])
    lying = {path.relative_to(results).as_posix() for path in results.rglob("*") if path.is_file()}
    assert lying - {"manifest.json"} == named


def test_every_target_has_an_adopted_estimate_inside_its_interval_or_says_why_not(
    finished: tuple[Path, str],
) -> None:
    with (finished[0].parent / "results" / "tables" / "target_estimates.csv").open(encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    with (finished[0].parent / "targets.csv").open(encoding="utf-8") as file:
        wanted = {row["target_id"] for row in csv.DictReader(file)}
    assert wanted == {row["target_id"] for row in rows}
    for row in rows:
        if row["adopted"] == "true":
            assert float(row["lower"]) < float(row["flow"]) < float(row["upper"])
        elif not row["flow"]:
            assert row["warnings"]


def test_second_run_does_nothing(finished: tuple[Path, str], run_workflow: Run) -> None:
    study, _ = finished
    before = {path: path.stat().st_mtime_ns for path in study.parent.rglob("results/**/*")}
    run = run_workflow(study)
    assert 0 == run.returncode
    assert [] == stages_run(run.stdout)
    assert "Nothing to do, the study is up to date." in run.stdout
    assert str(study.parent / "results" / "report.html") in run.stdout
    assert before == {path: path.stat().st_mtime_ns for path in study.parent.rglob("results/**/*")}


def test_input_saved_again_unchanged_starts_nothing(finished: tuple[Path, str], run_workflow: Run) -> None:
    peaks = finished[0].parent / "peaks.csv"
    peaks.write_bytes(peaks.read_bytes())
    assert [] == stages_run(run_workflow(finished[0]).stdout)


def test_deleted_intermediates_are_missed_only_when_needed_and_then_made_again(
    finished: tuple[Path, str], run_workflow: Run
) -> None:
    study, _ = finished
    before = tables(study)
    figure = next((study.parent / "work" / "estimate" / "figures").iterdir())
    figure.unlink()
    assert [] == stages_run(run_workflow(study).stdout), "the results are whole"

    (study.parent / "results" / "report.html").unlink()
    run = run_workflow(study)
    assert 0 == run.returncode, run.stdout
    assert ["estimate", "publish"] == stages_run(run.stdout)
    assert figure.is_file()
    assert before == tables(study)


def test_deleted_result_is_published_again(finished: tuple[Path, str], run_workflow: Run) -> None:
    study, _ = finished
    table = study.parent / "results" / "tables" / "growth_curves.csv"
    before = table.read_bytes()
    table.unlink()
    assert ["publish"] == stages_run(run_workflow(study).stdout)
    assert before == table.read_bytes()


def test_new_title_is_published_without_computing_anything_anew(
    finished: tuple[Path, str], run_workflow: Run
) -> None:
    study, _ = finished
    before = tables(study)
    text = study.read_text(encoding="utf-8")
    study.write_text(text.replace("title: ", "title: Second look. ", 1), encoding="utf-8")
    run = run_workflow(study)
    study.write_text(text, encoding="utf-8")
    assert ["publish"] == stages_run(run.stdout), run.stdout
    assert "Second look." in (study.parent / "results" / "report.html").read_text(encoding="utf-8")
    assert before == tables(study)


def test_one_core_and_shuffled_rows_give_the_same_tables(
    finished: tuple[Path, str],
    tmp_path: Path,
    copy_example: Callable[..., Path],
    quick_parts: dict[str, Any],
    run_workflow: Run,
) -> None:
    study = copy_example(tmp_path / "shuffled", **quick_parts)
    for name in ("gauges", "peaks", "thresholds", "periods", "targets", "redundancy", "ledger"):
        path = study.parent / f"{name}.csv"
        head, *rows = path.read_text(encoding="utf-8").splitlines()
        random.Random(7).shuffle(rows)
        path.write_text("\n".join([head, *rows]) + "\n", encoding="utf-8")
    run = run_workflow(study, "--cores", "1")
    assert 0 == run.returncode, run.stdout

    expected, found = tables(finished[0]), tables(study)
    assert list(expected) == list(found)
    # The accounting names the rows of the input files, whose order this test changed.
    differing = [name for name in expected if expected[name] != found[name]]
    assert [name for name in differing if name != "record_accounting.csv"] == []
    assert fates(expected["record_accounting.csv"]) == fates(found["record_accounting.csv"])


def fates(accounting: bytes) -> list[tuple[str, ...]]:
    rows = csv.DictReader(accounting.decode("utf-8").splitlines())
    return sorted((r["gauge_id"], r["water_year"], r["fate"], r["reason"]) for r in rows)


def test_killed_run_is_taken_up_again(
    finished: tuple[Path, str],
    tmp_path: Path,
    copy_example: Callable[..., Path],
    quick_parts: dict[str, Any],
    run_workflow: Run,
    repository: Path,
) -> None:
    study = copy_example(tmp_path / "killed", **quick_parts)
    process = subprocess.Popen(
        [sys.executable, "-m", "snakemake", "--configfile", str(study)],
        cwd=repository,
        stdout=subprocess.DEVNULL,
        stderr=subprocess.DEVNULL,
        start_new_session=True,
    )
    until = time.monotonic() + 120
    while not (study.parent / "work" / "screen" / "contribution.json").is_file() and time.monotonic() < until:
        time.sleep(0.05)
    os.killpg(process.pid, signal.SIGKILL)
    process.wait()
    assert not (study.parent / "results").exists()

    run = run_workflow(study)
    assert 0 == run.returncode, run.stdout
    assert "intake" not in stages_run(run.stdout)
    assert tables(finished[0]) == tables(study)


@pytest.fixture
def spoilt(tmp_path: Path, copy_example: Callable[..., Path], quick_parts: dict[str, Any]) -> Path:
    """The example with two mistakes in its peaks."""
    study = copy_example(tmp_path / "spoilt", **quick_parts)
    peaks = study.parent / "peaks.csv"
    head, first, second, *rows = peaks.read_text(encoding="utf-8").splitlines()
    names = head.split(",")
    broken = []
    for row, (column, value) in zip(
        (first, second), (("water_year", "long ago"), ("flow", "-3")), strict=True
    ):
        cells: list[Any] = next(csv.reader([row]))
        cells[names.index(column)] = value
        broken.append(",".join(cells))
    peaks.write_text("\n".join([head, *broken, *rows]) + "\n", encoding="utf-8")
    return study


def test_mistakes_in_the_inputs_are_told_with_their_place_and_leave_no_results(
    spoilt: Path, run_workflow: Run
) -> None:
    run = run_workflow(spoilt)
    assert 1 == run.returncode
    assert "peaks.csv, row 2, column 'water_year', value 'long ago'" in run.stdout
    assert "peaks.csv, row 3, column 'flow', value '-3'" in run.stdout
    assert "The study stopped in stage `intake`" in run.stdout
    assert str(spoilt.parent / "work" / "logs" / "intake.log") in run.stdout
    assert "Traceback" not in run.stdout
    assert "CalledProcessError" not in run.stdout
    assert not (spoilt.parent / "results").exists()
