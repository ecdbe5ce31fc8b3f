"""Reruns cost what changed, and an edition is frozen, compared with in the next run, and told on the page."""

from __future__ import annotations

import json
import re
import subprocess
from collections.abc import Callable
from pathlib import Path

import pytest
from typer.testing import CliRunner

from tests.benchmarks.drill_kill import small_study
from tests.benchmarks.synthetic_study import add_year
from wrackline.cli import app

pytestmark = pytest.mark.workflow

Run = Callable[..., "subprocess.CompletedProcess[str]"]
COMPUTED = {"dependence", "atsite", "skew", "weight", "pool", "regress", "validate", "estimate"}


def stages_run(run: subprocess.CompletedProcess[str]) -> set[str]:
    assert run.returncode == 0, run.stdout
    return set(re.findall(r"^\[[\w ]+\] (\w+) \.\.\.$", run.stdout, re.MULTILINE))


def page(study: Path) -> str:
    return (study.parent / "results" / "report.html").read_text(encoding="utf-8")


@pytest.fixture(scope="module")
def finished(tmp_path_factory: pytest.TempPathFactory, run_workflow: Run) -> Path:
    study = small_study(tmp_path_factory.mktemp("editions") / "study")
    assert COMPUTED < stages_run(run_workflow(study))
    return study


def test_time_stamps_and_the_order_of_rows_recompute_nothing(finished: Path, run_workflow: Run) -> None:
    tables = finished.parent / "results" / "tables"
    before = {path.name: path.read_bytes() for path in tables.iterdir()}
    for name in ("gauges.csv", "targets.csv"):
        (finished.parent / name).touch()
    assert set() == stages_run(run_workflow(finished))

    peaks = finished.parent / "peaks.csv"
    head, *rows = peaks.read_text(encoding="utf-8").splitlines()
    peaks.write_text("\n".join([head, *reversed(rows)]) + "\n", encoding="utf-8")
    # The account of rows names them by number, so reading, screening and publishing are done again.
    assert set() == stages_run(run_workflow(finished)) & COMPUTED
    after = {path.name: path.read_bytes() for path in tables.iterdir()}
    assert {"record_accounting.csv"} == {name for name in before if before[name] != after[name]}


def test_edition_is_frozen_compared_with_and_told_on_the_page(finished: Path, run_workflow: Run) -> None:
    command = CliRunner().invoke
    frozen = command(app, ["freeze", str(finished), "--name", "first"])
    assert (0, "") == (frozen.exit_code, "" if frozen.exit_code == 0 else frozen.output)
    edition = finished.parent / "editions" / "first"
    assert 0 == command(app, ["check", str(edition)]).exit_code

    add_year(finished.parent / "peaks.csv", "000003", 2025, 900.0)
    text = finished.read_text(encoding="utf-8")
    finished.write_text(text + "editions: {previous: first}\n", encoding="utf-8")
    assert "compare" in stages_run(run_workflow(finished))
    assert "What changed since edition first" in page(finished)
    manifest = json.loads((finished.parent / "results" / "manifest.json").read_text(encoding="utf-8"))
    for name in ("changes", "change_attribution", "input_changes"):
        assert f"tables/{name}.csv" in manifest["outputs"]
    changes = (finished.parent / "results" / "tables" / "input_changes.csv").read_text(encoding="utf-8")
    assert ["peaks.csv,000003,water year 2025,flow,added,,900.0,own_new_peaks"] == changes.splitlines()[1:]
    assert set() == stages_run(run_workflow(finished))

    finished.write_text(text, encoding="utf-8")
    assert {"publish"} == stages_run(run_workflow(finished))
    assert "What changed since edition" not in page(finished)
    assert not (finished.parent / "results" / "tables" / "changes.csv").exists()


def test_previous_edition_that_is_not_there_is_told(finished: Path, run_workflow: Run) -> None:
    text = finished.read_text(encoding="utf-8")
    finished.write_text(text + "editions: {previous: never}\n", encoding="utf-8")
    run = run_workflow(finished)
    finished.write_text(text, encoding="utf-8")
    assert run.returncode != 0
    assert "no edition lies there" in run.stdout
    assert "Traceback" not in run.stdout
