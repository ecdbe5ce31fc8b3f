"""Wide tables become a study's tables: a column per gauge, years or dates in the first."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest

import wrackline
from wrackline.study.faults import StudyFaults
from wrackline.study.importing import ImportedPeaks


def read(folder: Path, text: str, **options: Any) -> ImportedPeaks:
    (folder / "wide.csv").write_bytes(text.encode())
    return wrackline.import_peaks(folder / "wide.csv", folder / "study", **({"flow_unit": "m3/s"} | options))


def fates(done: ImportedPeaks) -> list[tuple[int, str, str]]:
    return [tuple(row) for row in done.account[["row", "gauge_id", "fate"]].to_numpy().tolist()]


def test_every_cell_has_its_line_in_the_account(tmp_path: Path) -> None:
    done = read(tmp_path, "\ufeffwater_year,007,B-2\n1990,12.5,\n1991,NA,8\n\n1992,<3,>40\n")
    assert [
        (2, "007", "peak"), (2, "B-2", "left out"),
        (3, "007", "left out"), (3, "B-2", "peak"),
        (5, "007", "peak"), (5, "B-2", "peak"),
    ] == fates(done)  # fmt: skip
    assert [
        ["007", 1990, "12.5", "", ""],
        ["007", 1992, "", "", "3"],
        ["B-2", 1991, "8", "", ""],
        ["B-2", 1992, "", "40", ""],
    ] == done.peaks[["gauge_id", "water_year", "flow", "low", "high"]].to_numpy().tolist()
    assert 0 == len(done.thresholds)


@pytest.mark.parametrize("separator", [",", ";", "\t"])
def test_dates_give_the_water_year_and_the_larger_of_two_is_kept(separator: str, tmp_path: Path) -> None:
    rows = ["date,A,B", "1989-11-03,5,", "1990-02-01,9,4", "1990-10,,7"]
    done = read(tmp_path, "\n".join(rows).replace(",", separator))
    assert [["A", 1990, "9"], ["B", 1990, "4"], ["B", 1991, "7"]] == (
        done.peaks[["gauge_id", "water_year", "flow"]].to_numpy().tolist()
    )
    assert 6 == len(done.account)


def test_plain_years_are_taken_as_water_years_and_that_is_told(tmp_path: Path) -> None:
    done = read(tmp_path, "Year,A\n1990,5\n")
    assert "year_taken_as_water_year" in {warning.code for warning in done.warnings}


def test_the_unit_must_be_known_and_goes_into_the_study(tmp_path: Path) -> None:
    with pytest.raises(StudyFaults) as caught:
        read(tmp_path, "water_year,A\n1990,5\n", flow_unit=None)
    assert ["no_unit"] == [fault.code for fault in caught.value.problems]
    read(tmp_path, "water_year,A\n1990,5\n", flow_unit="ft3/s")
    assert "{flow: ft3/s, area: mi2}" in (tmp_path / "study" / "study.yaml").read_text(encoding="utf-8")


@pytest.mark.parametrize(
    ("text", "code"),
    [
        ("water_year,A\n1990,5\n19x1,5\n", "malformed_date"),
        ("water_year,A\n1990,5\n0000,5\n", "malformed_date"),
        ("water_year,A\n1990,5\n,5\n", "malformed_date"),
        ("water_year,A\n1990,-999\n", "negative"),
        ("water_year,A\n1990,12e\n", "not_a_number"),
        ("water_year;A\n1990;12,5\n", "decimal_comma"),
        ("water_year,A,A\n1990,1,2\n", "duplicate_column"),
        ("water_year,A,\n1990,1,2\n", "nameless_column"),
        ("water_year,Mill (upper)\n1990,1\n", "bad_identifier"),
        ("water_year,A\n1990,1,200\n", "ragged_row"),
    ],
)
def test_bad_cells_are_told(text: str, code: str, tmp_path: Path) -> None:
    with pytest.raises(StudyFaults) as caught:
        read(tmp_path, text)
    assert code in [fault.code for fault in caught.value.problems]
    assert not (tmp_path / "study").exists()
