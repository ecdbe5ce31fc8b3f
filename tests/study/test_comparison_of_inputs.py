"""Two editions' inputs are compared row by row, and every difference counts as one cause."""

from __future__ import annotations

from pathlib import Path

import pandas as pd
import pytest

from wrackline.study.config import StudyConfig
from wrackline.study.edition_differences import (
    EditionTables,
    list_input_changes,
    mix_configuration,
    mix_records,
    mix_study,
    read_tables,
    same_value,
)
from wrackline.study.editions import Edition

GAUGES = "gauge_id,name,area,region,rain\n01,A,10,west,900\n02,B,20,west,950\n"
PEAKS = "gauge_id,water_year,flow,flags\n01,2001,5,\n01,2002,7.50,\n02,2001,9,estimated\n"
THRESHOLDS = "gauge_id,first_year,last_year,low\n01,1950,2000,12\n"
LEDGER = (
    "date,by,subject,action,why,gauge_id,water_year,pool,value,evidence\n"
    "2020-01-01,Survey,peak,exclude,ice,01,2001,,,\n2020-01-02,Survey,model,choose,why not,,,,,\n"
)


def tables_of(folder: Path, config: StudyConfig | None = None, **texts: str) -> EditionTables:
    """Tables as if an edition had these inputs; what is not given is as above."""
    folder.mkdir()
    given = {"gauges": GAUGES, "peaks": PEAKS, "thresholds": THRESHOLDS, "ledger": LEDGER} | texts
    inputs = {}
    for key, text in given.items():
        inputs[key] = folder / f"{key}.csv"
        inputs[key].write_text(text, encoding="utf-8")
    return read_tables(Edition("x", config or StudyConfig(), {}, inputs, folder))


def told(old: EditionTables, new: EditionTables) -> list[tuple[str, ...]]:
    return [
        (c.file, c.site_id, c.place, c.column, c.change, c.old, c.new, c.cause)
        for c in list_input_changes(old, new)
    ]


@pytest.mark.parametrize(
    ("key", "text", "expected"),
    [
        (
            "peaks",
            PEAKS + "02,2002,11,\n",
            ("peaks.csv", "02", "water year 2002", "flow", "added", "", "11", "own_new_peaks"),
        ),
        (
            "peaks",
            PEAKS.replace("01,2001,5,\n", ""),
            ("peaks.csv", "01", "water year 2001", "flow", "removed", "5", "", "own_new_peaks"),
        ),
        (
            "peaks",
            PEAKS.replace(",9,", ",8,"),
            ("peaks.csv", "02", "water year 2001", "flow", "changed", "9", "8", "own_revised_peaks"),
        ),
        (
            "peaks",
            PEAKS.replace("estimated", ""),
            ("peaks.csv", "02", "water year 2001", "flags", "changed", "estimated", "", "own_thresholds_flags"),
        ),
        (
            "thresholds",
            THRESHOLDS.replace(",12", ",13"),
            ("thresholds.csv", "01", "1950 to 2000", "low", "changed", "12", "13", "own_thresholds_flags"),
        ),
        (
            "gauges",
            GAUGES.replace("900", "910"),
            ("gauges.csv", "01", "", "rain", "changed", "900", "910", "site_attributes"),
        ),
        (
            "gauges",
            GAUGES.replace("01,A,10,west", "01,A,10,east"),
            ("gauges.csv", "01", "", "region", "changed", "west", "east", "regional_models"),
        ),
        (
            "ledger",
            LEDGER.replace("2020-01-01,Survey,peak,exclude,ice,01,2001,,,\n", ""),
            (
                "ledger.csv", "01", "2020-01-01, peak, exclude, water year 2001", "", "removed", "why ice", "",
                "own_thresholds_flags",
            ),
        ),
        (
            "ledger",
            LEDGER.replace("why not", "since"),
            ("ledger.csv", "", "2020-01-02, model, choose", "why", "changed", "why not", "since", "configuration"),
        ),
    ],
)  # fmt: skip
def test_difference_is_told_with_its_place_and_cause(
    tmp_path: Path, key: str, text: str, expected: tuple[str, ...]
) -> None:
    # The files are named by the configuration; those that it leaves out by their key.
    assert [expected] == told(tables_of(tmp_path / "old"), tables_of(tmp_path / "new", **{key: text}))


def test_rewritten_files_do_not_differ(tmp_path: Path) -> None:
    head, *rows = PEAKS.splitlines()
    text = "\ufeff" + "\r\n".join([head, *reversed(rows)]).replace("7.50", "7.5") + "\r\n\r\n"
    assert [] == told(tables_of(tmp_path / "old"), tables_of(tmp_path / "new", peaks=text))


def test_choices_are_told_by_key_and_names_of_files_are_no_choices(tmp_path: Path) -> None:
    new = StudyConfig.model_validate({"confidence": 0.8, "output": "out", "study": {"title": "Second"}})
    assert [("study.yaml", "", "confidence", "", "changed", "0.9", "0.8", "configuration")] == told(
        tables_of(tmp_path / "old"), tables_of(tmp_path / "new", new)
    )


@pytest.fixture
def pair(tmp_path: Path) -> tuple[EditionTables, EditionTables]:
    """Old and new tables that differ by a new row, a revised one, a flag and a threshold."""
    peaks = PEAKS.replace("01,2001,5,", "01,2001,6,revised").replace("7.50", "8") + "02,2002,11,\n"
    return (
        tables_of(tmp_path / "old"),
        tables_of(tmp_path / "new", peaks=peaks, thresholds=THRESHOLDS.replace(",12", ",13")),
    )


def rows(frame: pd.DataFrame) -> list[tuple[str, ...]]:
    return sorted(
        tuple(row) for row in frame[["gauge_id", "water_year", "flow", "flags"]].to_numpy().tolist()
    )


def test_records_are_mixed_by_rows_values_and_flags(pair: tuple[EditionTables, EditionTables]) -> None:
    both = {"01", "02"}
    old, kept = [("01", "2001", "5", ""), ("01", "2002", "7.50", "")], ("02", "2001", "9", "estimated")
    assert [*old, kept] == rows(mix_records(*pair, (), both)["peaks"])
    assert [*old, kept, ("02", "2002", "11", "")] == rows(
        mix_records(*pair, ["own_new_peaks"], both)["peaks"]
    )
    assert [("01", "2001", "6", ""), ("01", "2002", "8", ""), kept] == rows(
        mix_records(*pair, ["own_revised_peaks"], both)["peaks"]
    )
    flagged = mix_records(*pair, ["own_thresholds_flags"], both)
    assert [("01", "2001", "5", "revised"), old[1], kept] == rows(flagged["peaks"])
    assert ["13"] == flagged["thresholds"]["low"].tolist()


def test_decision_on_a_peak_that_is_not_there_is_left_out_of_the_mixture(
    tmp_path: Path, pair: tuple[EditionTables, EditionTables]
) -> None:
    gone = tables_of(tmp_path / "gone", peaks=PEAKS.replace("01,2001,5,\n", ""))
    assert 1 == len(mix_records(pair[0], gone, (), {"01", "02"})["ledger"])
    assert 0 == len(mix_records(pair[0], gone, ["own_new_peaks"], {"01", "02"})["ledger"])


def test_study_is_mixed_of_records_attributes_and_choices(
    tmp_path: Path, pair: tuple[EditionTables, EditionTables]
) -> None:
    sites = GAUGES.replace("900", "910") + "03,C,30,east,800\n"
    new = tables_of(tmp_path / "sites", gauges=sites, ledger=LEDGER.replace("why not", "since"))
    mixed = mix_study(pair[0], new, new)
    assert ["910", "950"] == mixed["gauges"]["rain"].tolist()
    assert ["exclude", "choose"] == mixed["ledger"]["action"].tolist()
    assert ["ice", "since"] == mixed["ledger"]["why"].tolist()


def test_choices_are_mixed_without_how_files_are_read() -> None:
    feet = StudyConfig.model_validate({"units": {"flow": "ft3/s"}, "confidence": 0.8})
    mixed = mix_configuration(StudyConfig(), feet)
    assert ("m3/s", 0.8) == (mixed.units.flow, mixed.confidence)


@pytest.mark.parametrize(
    ("one", "other", "same"),
    [
        ("53.8", "53.80", True),
        ("1e2", "100", True),
        ("", "0", False),
        ("a", "b", False),
        ("0410", "0410", True),
    ],
)
def test_cells_are_the_same_when_their_numbers_are(one: str, other: str, same: bool) -> None:
    assert same == same_value(one, other)
