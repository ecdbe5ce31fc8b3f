"""Harmless ways of saving a CSV change nothing; rows are numbered as a spreadsheet numbers them."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest

from wrackline.study.checking import check
from wrackline.study.inputs import read_study


@pytest.mark.parametrize(
    "saved",
    [
        lambda text: b"\xef\xbb\xbf" + text.encode(),
        lambda text: text.replace("\n", "\r\n").encode(),
        lambda text: text.replace("\n", "\r").encode(),
        lambda text: text.replace("\n", "\r\n", 20).encode(),
        lambda text: text.rstrip("\n").encode(),
        lambda text: (text + "\n\n,,,,,,,,\n").encode(),
        lambda text: text.replace(",", " , ").encode(),
        lambda text: "".join('"' + line.replace(",", '","') + '"\n' for line in text.splitlines()).encode(),
    ],
    ids=[
        "byte-order mark",
        "CRLF",
        "CR",
        "mixed ends",
        "no last end",
        "blank rows",
        "blanks around",
        "all quoted",
    ],
)
def test_harmless_differences_are_accepted(saved: Any, small_study: Any, tmp_path: Path) -> None:
    small_study.raw["peaks.csv"] = saved(small_study.text("peaks.csv"))
    study = read_study(small_study.write(tmp_path))
    assert (73, ()) == (len(study.accounting), study.warnings)


def test_identifiers_keep_leading_zeros_and_names_any_script(small_study: Any, tmp_path: Path) -> None:
    small_study.put("gauges.csv", 2, "name", "Þjórsá, 川")
    gauges = read_study(small_study.write(tmp_path)).gauges
    assert ("00101", "Þjórsá, 川") == (gauges["gauge_id"][0], gauges["name"][0])


def test_a_line_break_inside_quotes_does_not_count_as_a_row(small_study: Any, tmp_path: Path) -> None:
    small_study.put("gauges.csv", 2, "name", "Stream\nat the mill")
    small_study.put("gauges.csv", 4, "area", "0")
    assert [4] == [fault.row for fault in check(small_study.write(tmp_path)).problems]


def test_a_blank_line_counts_as_a_row(small_study: Any, tmp_path: Path) -> None:
    small_study.put("gauges.csv", 4, "area", "0")
    text = small_study.text("gauges.csv")
    small_study.raw["gauges.csv"] = text.replace("\n", "\n\n", 1).encode()
    assert [5] == [fault.row for fault in check(small_study.write(tmp_path)).problems]


def test_a_wrong_byte_is_named_by_its_position(small_study: Any, tmp_path: Path) -> None:
    small_study.raw["ledger.csv"] = b"date,by\n2025-01-01,M\xfcller\n"
    problem = check(small_study.write(tmp_path)).problems[0]
    assert "Byte 21 (hexadecimal FC)" in problem.problem
    assert b"\xfc" == small_study.raw["ledger.csv"][20:21]


def test_every_one_of_many_bad_cells_is_told(small_study: Any, tmp_path: Path) -> None:
    for row in range(2, 74):
        small_study.put("peaks.csv", row, "flow", "-1")
    assert list(range(2, 74)) == [fault.row for fault in check(small_study.write(tmp_path)).problems]


def test_columns_may_stand_in_any_order(small_study: Any, tmp_path: Path) -> None:
    small_study.tables["gauges.csv"] = [line[::-1] for line in small_study.tables["gauges.csv"]]
    assert () == check(small_study.write(tmp_path)).problems
