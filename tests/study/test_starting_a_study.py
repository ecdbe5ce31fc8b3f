from __future__ import annotations

from pathlib import Path

import pytest

from wrackline.study.checking import check
from wrackline.study.config import StudyConfig
from wrackline.study.faults import StudyFaults
from wrackline.study.loading import load_config
from wrackline.study.starting import start_study
from wrackline.study.vocabulary import INPUT_TABLES


def test_the_template_says_the_defaults(tmp_path: Path) -> None:
    start_study(tmp_path / "new")
    config, default = load_config(tmp_path / "new" / "study.yaml"), StudyConfig.model_validate({})
    assert default.model_copy(update={"inputs": config.inputs}) == config


def test_a_new_study_lacks_gauges_and_peaks_and_nothing_else(tmp_path: Path) -> None:
    start_study(tmp_path / "new")
    found = check(tmp_path / "new" / "study.yaml")
    assert [("no_rows", "gauges.csv"), ("no_rows", "peaks.csv")] == [(f.code, f.file) for f in found.problems]
    assert {"no_rows"} == {f.code for f in found.warnings}


def test_every_column_is_explained(tmp_path: Path) -> None:
    start_study(tmp_path / "new")
    page = (tmp_path / "new" / "columns.md").read_text(encoding="utf-8")
    for table in INPUT_TABLES:
        head = (tmp_path / "new" / f"{table.name}.csv").read_text(encoding="utf-8").strip().split(",")
        assert list(table.names) == head
        assert all(f"| `{name}` |" in page for name in head)


def test_nothing_is_overwritten(tmp_path: Path) -> None:
    (tmp_path / "mine.txt").write_text("kept", encoding="utf-8")
    with pytest.raises(StudyFaults):
        start_study(tmp_path)
    assert ["mine.txt"] == [path.name for path in tmp_path.iterdir()]
