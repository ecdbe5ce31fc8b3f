"""The intake stage: what it hands on, and that equal inputs give equal bytes."""

from __future__ import annotations

import importlib.util
import json
from pathlib import Path
from types import ModuleType
from typing import Any

import numpy as np
import pytest

from wrackline.stages import intake
from wrackline.stages.running import StudyFiles
from wrackline.study.contribution import read_contribution
from wrackline.study.faults import StudyFaults
from wrackline.study.handover import read_records, read_sites
from wrackline.study.inputs import read_study
from wrackline.study.loading import load_config
from wrackline.study.tables import read_table


def _builder() -> ModuleType:
    """The small study is built beside the tests of the study's files."""
    path = Path(__file__).parents[1] / "study" / "conftest.py"
    spec = importlib.util.spec_from_file_location("small_study_builder", path)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.fixture
def small_study() -> Any:
    return _builder().SmallStudy()


def take_in(study: Any, folder: Path) -> Path:
    folder.mkdir(exist_ok=True)
    study_file = study.write(folder)
    intake.run(StudyFiles(load_config(study_file), study_file))
    return folder / "work" / "intake"


def test_what_is_handed_on_is_what_was_read(small_study: Any, tmp_path: Path) -> None:
    work = take_in(small_study, tmp_path / "a")
    study = read_study(tmp_path / "a" / "study.yaml")
    gauges = read_sites(work / "gauges.csv")
    records = read_records(work / "records.csv", gauges["gauge_id"].tolist())
    assert study.records.gauge_ids == records.gauge_ids
    for name in ("offsets", "water_year", "flow_low", "flow_high", "perception_low", "perception_high", "historic",
                 "observed", "cause"):  # fmt: skip
        np.testing.assert_array_equal(getattr(study.records, name), getattr(records, name))
    assert study.gauges["area_km2"].tolist() == gauges["area_km2"].tolist()
    assert ["T1", "T2"] == read_sites(work / "targets.csv")["target_id"].tolist()
    assert 73 == len(read_table(work / "accounting.csv", text=("file", "fate", "reason", "decided_by")))


def test_equal_inputs_give_equal_bytes_whatever_their_order(small_study: Any, tmp_path: Path) -> None:
    first = take_in(small_study, tmp_path / "a")
    for name, table in small_study.tables.items():
        small_study.tables[name] = [table[0], *table[:0:-1]]
    second = take_in(small_study, tmp_path / "b")
    names = sorted(str(path.relative_to(first)) for path in first.rglob("*") if path.is_file())
    assert names == sorted(str(path.relative_to(second)) for path in second.rglob("*") if path.is_file())
    for name in names:
        if name != "accounting.csv":
            assert (first / name).read_bytes() == (second / name).read_bytes(), name


def test_the_section_on_data_accounts_for_all_rows(small_study: Any, tmp_path: Path) -> None:
    small_study.put("peaks.csv", 4, "flags", "daily_mean")
    contribution = read_contribution(take_in(small_study, tmp_path / "a"))
    (section,) = contribution.sections
    assert "data" == section.key
    assert any(
        "69 are used with their flow, 1 as an interval, and 3 are left out" in p for p in section.paragraphs
    )
    fates = section.tables[0]
    assert 73 == sum(int(row[-1]) for row in fates.rows)
    causes = next(t.frame for t in contribution.tables if t.name == "floods_by_cause").set_index("cause")
    assert {"rain": 69, "unknown": 1} == causes["n_peaks"].to_dict()
    assert {"ledger", "floods_by_cause"} == {t.name for t in contribution.tables}


def test_problems_leave_nothing_behind(small_study: Any, tmp_path: Path) -> None:
    small_study.put("peaks.csv", 4, "flow", "-1")
    with pytest.raises(StudyFaults):
        take_in(small_study, tmp_path / "a")
    assert not (tmp_path / "a" / "work").exists()


def test_warnings_reach_the_contribution(small_study: Any, tmp_path: Path) -> None:
    small_study.put("gauges.csv", 4, "region", "")
    work = take_in(small_study, tmp_path / "a")
    document = json.loads((work / "contribution.json").read_text(encoding="utf-8"))
    assert ["gauge_without_region"] == [warning["code"] for warning in document["warnings"]]
