"""A run leaves alone what it must not touch, and tells a user's mistake in the user's words."""

from __future__ import annotations

import json
import subprocess
from collections.abc import Callable
from pathlib import Path

import pytest

import study_folder
from study_folder import forget_damaged, lock_study

Run = Callable[..., "subprocess.CompletedProcess[str]"]


@pytest.fixture
def small_study(tmp_path: Path) -> Path:
    study = tmp_path / "study.yaml"
    study.write_text("study: {title: Small}\n", encoding="utf-8")
    return study


def test_second_run_is_refused_and_touches_nothing(small_study: Path, run_workflow: Run) -> None:
    lock_study(small_study.parent)
    try:
        second = run_workflow(small_study)
    finally:
        study_folder._held.pop().close()
    assert second.returncode == 1
    assert "Another run is at work on this study" in second.stdout
    assert "Traceback" not in second.stdout
    assert sorted(path.name for path in small_study.parent.iterdir()) == [study_folder.LOCK, "study.yaml"]


def test_lock_ends_with_its_holder(small_study: Path, run_workflow: Run) -> None:
    lock_study(small_study.parent)
    study_folder._held.pop().close()
    assert "Another run" not in run_workflow(small_study, "--dry-run").stdout


def test_faults_of_the_study_file_are_all_told_before_anything_runs(
    tmp_path: Path, run_workflow: Run
) -> None:
    study = tmp_path / "study.yaml"
    study.write_text("units: {flow: buckets}\ncolour: blue\n", encoding="utf-8")
    run = run_workflow(study)
    assert run.returncode == 1
    assert "study.yaml, row 1, column 'units.flow', value 'buckets'" in run.stdout
    assert "study.yaml, row 2, column 'colour'" in run.stdout
    assert "Traceback" not in run.stdout
    assert [path.name for path in tmp_path.iterdir()] == ["study.yaml"]


def test_settings_on_the_command_line_are_refused(small_study: Path, run_workflow: Run) -> None:
    run = run_workflow(small_study, "--config", "seed=3")
    assert run.returncode == 1
    assert "write them into the study file" in run.stdout


def test_stage_with_a_deleted_figure_or_table_is_done_again(tmp_path: Path) -> None:
    for stage in ("screen", "pool", "regress"):
        folder = tmp_path / "work" / stage
        (folder / "tables").mkdir(parents=True)
        (folder / "figures").mkdir()
        document = {
            "tables": {"pools": []},
            "models": ["equations"],
            "sections": [{"figures": [{"file": "curve.png"}]}],
        }
        (folder / "contribution.json").write_text(json.dumps(document), encoding="utf-8")
        for name in ("tables/pools.csv", "tables/equations.json", "figures/curve.png"):
            (folder / name).touch()
    (tmp_path / "work" / "screen" / "figures" / "curve.png").unlink()
    (tmp_path / "work" / "regress" / "tables" / "equations.json").unlink()

    assert forget_damaged(tmp_path, ("screen", "pool", "regress", "publish"), "results") == [
        "screen",
        "regress",
    ]
    assert not (tmp_path / "work" / "screen" / "contribution.json").exists()
    assert (tmp_path / "work" / "pool" / "contribution.json").exists()


def test_results_from_which_a_table_was_deleted_are_published_again(tmp_path: Path) -> None:
    (tmp_path / "results").mkdir()
    manifest = tmp_path / "results" / "manifest.json"
    manifest.write_text(
        json.dumps({"outputs": {"report.html": {}, "tables/pools.csv": {}}}), encoding="utf-8"
    )
    (tmp_path / "results" / "report.html").touch()
    assert forget_damaged(tmp_path, ("publish",), "results") == ["publish"]
    assert not manifest.exists()
