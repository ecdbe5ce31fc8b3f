"""Settings, files and texts that would hang a run, fill a disk's wrong corner or act on a terminal are told instead."""

from __future__ import annotations

import os
from pathlib import Path
from typing import Any

import pytest

from tests.study.fuzzing.grammar import SETTINGS
from wrackline.study.checking import check
from wrackline.study.faults import Fault, FaultLog
from wrackline.study.loading import load_config


def problems(study: Any, folder: Path) -> tuple[Fault, ...]:
    return check(study.write(folder)).problems


@pytest.mark.parametrize("line", SETTINGS, ids=range(len(SETTINGS)))
def test_every_odd_setting_ends_in_words(line: str, small_study: Any, tmp_path: Path) -> None:
    small_study.study += line.encode("utf-8", "ignore").decode() + "\n"
    found = check(small_study.write(tmp_path))
    assert found.exit_status in (0, 1, 2)
    assert all(fault.problem for fault in found.problems)


@pytest.mark.parametrize(
    ("line", "words"),
    [
        ("seed: &one [*one]", "an alias"),
        ("seed: !!float abc", "cannot be read as float"),
        ("seed: " + "9" * 5000, "cannot be read as int"),
        ("deep: " + "[" * 3000 + "]" * 3000, "nested far deeper"),
        ("deep: " + "[" * 30 + "]" * 30, "nested far deeper"),
        ('study: {title: "\\e[2J"}', "control character"),
        ('study: {title: "\\ud800"}', "control character"),
        ('inputs: {gauges: "a\\0b"}', "control character"),
    ],
    ids=["alias", "float", "long integer", "very deep", "deep", "escape", "half a character", "NUL"],
)
def test_what_yaml_can_do_and_no_study_needs_is_refused_with_its_line(
    line: str, words: str, tmp_path: Path
) -> None:
    study_file = tmp_path / "study.yaml"
    study_file.write_text("# a comment\n" + line + "\n", encoding="utf-8")
    (problem,) = check(study_file).problems
    assert "yaml_syntax" == problem.code
    assert words in problem.problem
    # The parser itself gives up on the deepest, without a place.
    assert problem.row == (None if len(line) > 5500 else 2)


def test_line_ends_in_a_folded_text_are_no_control_characters(tmp_path: Path) -> None:
    study_file = tmp_path / "study.yaml"
    study_file.write_text("study:\n  purpose: |\n    One.\n    Two\tmore.\n", encoding="utf-8")
    assert "One.\nTwo\tmore.\n" == load_config(study_file).study.purpose


def test_too_short_a_pair_is_told_on_the_line_of_its_key(small_study: Any, tmp_path: Path) -> None:
    small_study.study += "regression:\n  transfer_area_ratio: [1]\n"
    (problem,) = problems(small_study, tmp_path)
    assert ("regression.transfer_area_ratio.1", len(small_study.study.splitlines())) == (
        problem.column,
        problem.row,
    )


@pytest.mark.parametrize(
    "output", [".", "..", "/", "work", "work/pool", "peaks.csv", "study.yaml", "''", "n" * 300]
)
def test_results_need_a_folder_of_their_own(output: str, small_study: Any, tmp_path: Path) -> None:
    small_study.study += f"output: {output}\n"
    (problem,) = problems(small_study, tmp_path)
    assert ("bad_output", "output") == (problem.code, problem.column)


@pytest.mark.parametrize("output", ["results", "out/2026", "../elsewhere", "works"])
def test_any_other_folder_serves(output: str, small_study: Any, tmp_path: Path) -> None:
    (tmp_path / "study").mkdir()
    small_study.study += f"output: {output}\n"
    assert () == problems(small_study, tmp_path / "study")


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="no pipes here")
def test_pipe_is_not_waited_for(small_study: Any, tmp_path: Path) -> None:
    study_file = small_study.write(tmp_path)
    (tmp_path / "ledger.csv").unlink()
    os.mkfifo(tmp_path / "ledger.csv")
    (problem,) = check(study_file).problems
    assert ("unreadable_file", "ledger.csv") == (problem.code, problem.file)


def test_value_is_shown_on_one_line_shortened_and_without_power_over_a_terminal() -> None:
    log = FaultLog()
    log.problem("odd", "a\x1b[2Jb.csv", "Odd.", "Is it '\ufeffname'?", row=2, column="n\nm", value="x" * 500)
    (fault,) = log.problems
    assert "a\\x1b[2Jb.csv" == fault.file
    assert "Is it '\\ufeffname'?" == fault.mend
    assert "n\\nm" == fault.column
    assert "x" * 170 + " ... (500 characters)" == fault.value


def test_letters_of_any_script_are_shown_as_they_are() -> None:
    log = FaultLog()
    log.problem("odd", "名.csv", "Odd.", value="Þjórsá 北川 é\u00a0½ 😀")
    assert ("名.csv", "Þjórsá 北川 é\u00a0½ 😀") == (log.problems[0].file, log.problems[0].value)


def test_remark_of_the_geodata_library_becomes_a_warning(
    small_study: Any, tmp_path: Path, repository: Path
) -> None:
    """Byte 68 of the file holds the mark by which GeoPackages are told from other databases."""
    content = bytearray((repository / "example_region" / "regions.gpkg").read_bytes())
    content[68:72] = bytes(4)
    (tmp_path / "regions.gpkg").write_bytes(bytes(content))
    small_study.set_key("inputs:\n", "inputs:\n  regions: regions.gpkg\n")
    warnings = check(small_study.write(tmp_path)).warnings
    assert any("application_id" in w.problem and str(tmp_path) not in w.problem for w in warnings)


def test_byte_order_mark_alone_is_an_empty_file(small_study: Any, tmp_path: Path) -> None:
    small_study.raw["gauges.csv"] = b"\xef\xbb\xbf"
    assert ("empty_file", "gauges.csv") == (
        problems(small_study, tmp_path)[0].code,
        problems(small_study, tmp_path)[0].file,
    )


@pytest.mark.parametrize(
    ("file", "column", "value", "code"),
    [
        ("peaks.csv", "flow", "1e308", "absurd_flow"),
        ("thresholds.csv", "low", "1e12", "absurd_flow"),
        ("gauges.csv", "area", "1e15", "absurd_area"),
        ("targets.csv", "area", "2.1e8", "absurd_area"),
    ],
)
def test_number_beyond_anything_on_earth_is_told(
    file: str, column: str, value: str, code: str, small_study: Any, tmp_path: Path
) -> None:
    small_study.put(file, 2, column, value)
    (problem,) = problems(small_study, tmp_path)
    assert (code, file, 2, column) == (problem.code, problem.file, problem.row, problem.column)


def test_decision_cannot_set_a_flow_without_end(small_study: Any, tmp_path: Path) -> None:
    row = small_study.add(
        "ledger.csv", date="2025-11-05", by="A. Analyst", subject="peak", action="set_flow", why="misread",
        gauge_id="00103", water_year="1992", value="9" * 400,
    )  # fmt: skip
    (problem,) = problems(small_study, tmp_path)
    assert ("bad_value", row, "value") == (problem.code, problem.row, problem.column)


def test_attribute_in_use_that_is_the_same_everywhere_is_told(small_study: Any, tmp_path: Path) -> None:
    for row in range(2, 8):
        small_study.put("gauges.csv", row, "rain_mm", "900")
        small_study.put("gauges.csv", row, "lakes_pct", "2")
    (problem,) = problems(small_study, tmp_path)
    assert ("constant_attribute", "rain_mm") == (problem.code, problem.column), "lakes_pct is not in use"
