"""`wrackline fit` as a user meets it: what is printed, in which unit, and with which exit status."""

from __future__ import annotations

import json
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

import wrackline
from wrackline import cli
from wrackline.study.faults import StudyFaults

EXAMPLES = {
    example["id"]: example
    for example in json.loads(
        (Path(__file__).parents[1] / "reference" / "at_site_published_examples.json").read_text(encoding="utf-8")
    )["examples"]
}  # fmt: skip
COMPUTED = {
    case["id"]: case
    for case in json.loads(
        (Path(__file__).parents[1] / "reference" / "at_site_computed_cases.json").read_text(encoding="utf-8")
    )["cases"]
}  # fmt: skip
HALF_A_DIGIT = 0.5e-4


@pytest.fixture
def run(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> Any:
    def run_command(*words: object) -> tuple[int, str, str]:
        monkeypatch.setattr(sys, "argv", ["wrackline", "fit", *(str(word) for word in words)])
        with pytest.raises(SystemExit) as ended:
            cli.main()
        printed = capsys.readouterr()
        assert "Traceback" not in printed.out + printed.err
        return int(ended.value.code or 0), printed.out, printed.err

    return run_command


def write_example(folder: Path, name: str) -> Path:
    example = EXAMPLES[name]
    rows = zip(example["water_year"], example["peak"], strict=True)
    path = folder / f"{name}.csv"
    path.write_text(
        "water_year,flow\n" + "".join(f"{year},{peak}\n" for year, peak in rows), encoding="utf-8"
    )
    return path


def write(folder: Path, text: str, name: str = "peaks.csv") -> Path:
    path = folder / name
    path.write_text(text, encoding="utf-8")
    return path


def told(run: Any, *words: object) -> dict[str, Any]:
    status, out, err = run(*words, "--json")
    assert (0, "") == (status, err)
    return dict(json.loads(out, parse_constant=lambda word: pytest.fail(f"{word} is not JSON")))


# Published moments, reconstructed from memory of the sources: tolerance half of the last printed digit.
@pytest.mark.parametrize("name", ["b17b_ex1_fishkill", "b17b_ex2_floyd"])
def test_published_moments_of_complete_records(name: str, run: Any, tmp_path: Path) -> None:
    """Bulletin 17B (1982), appendix 12, examples 1 and 2."""
    published = EXAMPLES[name]["published"]
    result = told(run, write_example(tmp_path, name), "--flow-unit", "ft3/s")
    assert published["mean_log10"] == pytest.approx(result["log10"]["mean"], abs=HALF_A_DIGIT)
    assert published["sd_log10"] == pytest.approx(result["log10"]["sd"], abs=HALF_A_DIGIT)
    # Example 1 prints its skew to two digits.
    digits = 0.5e-2 if name == "b17b_ex1_fishkill" else HALF_A_DIGIT
    assert published["skew_log10"] == pytest.approx(result["log10"]["skew"], abs=digits)


def test_published_low_floods_and_moments_of_the_82_year_record(run: Any, tmp_path: Path) -> None:
    """Bulletin 17C (England and others, 2019), appendix 10, example 2."""
    published = EXAMPLES["b17c_ex2_orestimba82"]["published"]
    result = told(run, write_example(tmp_path, "b17c_ex2_orestimba82"), "--flow-unit", "ft3/s")
    low = result["low_outliers"]
    assert (published["low_outliers"], published["low_outlier_threshold"]) == (low["count"], low["threshold"])
    assert published["zero_years"] == low["zeros"]
    assert published["mean_log10"] == pytest.approx(result["log10"]["mean"], abs=HALF_A_DIGIT)
    assert published["sd_log10"] == pytest.approx(result["log10"]["sd"], abs=HALF_A_DIGIT)
    # Printed as -0.929; half of its last digit.
    assert published["skew_log10"] == pytest.approx(result["log10"]["skew"], abs=0.5e-3)


def test_historic_period_enters_through_thresholds(run: Any, tmp_path: Path) -> None:
    """Floyd River with 1892-1934 known to have stayed below 71,500 ft3/s; computed by two independent solvers."""
    station = COMPUTED["syn_floyd_hist"]["station"]
    spans = write(tmp_path, "first_year,last_year,low\n1892,1934,71500\n", "thresholds.csv")
    result = told(
        run, write_example(tmp_path, "b17b_ex2_floyd"), "--thresholds", spans, "--flow-unit", "ft3/s"
    )
    assert (39, 0, 82) == (result["n_peaks"], result["n_historic"], result["record_years"])
    assert station["mean"] == pytest.approx(result["log10"]["mean"], abs=1e-6)
    assert station["sd"] == pytest.approx(result["log10"]["sd"], abs=1e-6)
    assert station["skew"] == pytest.approx(result["log10"]["skew"], abs=1e-6)
    flows = {f"{row['aep']:g}": row["flow"] for row in result["quantiles"]}
    for aep, flow in station["quantiles"].items():
        assert flow == pytest.approx(flows[aep], rel=1e-4), aep
    # Rank 1 of 82 years: half of 1/82 (Hirsch and Stedinger, 1987).
    assert {"water_year": 1953, "flow": 71500.0} == {
        key: result["plotting_positions"][0][key] for key in ("water_year", "flow")
    }
    assert 0.006098 == pytest.approx(result["plotting_positions"][0]["aep"], abs=1e-6)


def test_json_holds_what_other_programs_rely_on(run: Any, tmp_path: Path) -> None:
    result = told(
        run, write_example(tmp_path, "b17b_ex1_fishkill"), "--flow-unit", "ft3/s", "--skew", 0.6, "--skew-mse", 0.302
    )  # fmt: skip
    assert {
        "n_peaks", "n_historic", "record_years", "low_outliers", "log10", "station_skew_mse", "weighted_skew",
        "weighted_skew_mse", "quantiles", "plotting_positions", "warnings",
    } <= result.keys()  # fmt: skip
    assert {"threshold", "count"} <= result["low_outliers"].keys()
    assert {"mean", "sd", "skew"} == result["log10"].keys()
    assert all({"aep", "flow", "lower", "upper"} <= row.keys() for row in result["quantiles"])
    assert all(row["lower"] < row["flow"] < row["upper"] for row in result["quantiles"])
    assert [0.9, 0.8, 0.5, 0.2, 0.1, 0.04, 0.02, 0.01, 0.005, 0.002] == [
        r["aep"] for r in result["quantiles"]
    ]
    assert [8800.0, 8280.0, 4340.0] == [row["flow"] for row in result["plotting_positions"][:3]]
    assert 1 / 25 == pytest.approx(result["plotting_positions"][0]["aep"])
    # The example's own inverse-variance weight, printed as 0.7.
    assert 0.7 == pytest.approx(result["weighted_skew"], abs=0.05)
    assert "weighted_skew" == result["source"]


def test_station_skew_alone_leaves_the_weighted_skew_null(run: Any, tmp_path: Path) -> None:
    result = told(run, write_example(tmp_path, "b17b_ex1_fishkill"))
    assert (None, None, "station") == (
        result["weighted_skew"],
        result["weighted_skew_mse"],
        result["source"],
    )


def test_limits_follow_the_confidence(run: Any, tmp_path: Path) -> None:
    path = write_example(tmp_path, "b17b_ex1_fishkill")
    wide, narrow = (
        told(run, path, "--confidence", share, "--aep", 0.01)["quantiles"][0] for share in (0.9, 0.5)
    )
    assert wide["lower"] < narrow["lower"] < narrow["flow"] < narrow["upper"] < wide["upper"]


def test_flows_change_with_the_unit_and_the_shape_does_not(run: Any, tmp_path: Path) -> None:
    path = write_example(tmp_path, "b17b_ex1_fishkill")
    feet, metres = (told(run, path, "--flow-unit", unit) for unit in ("ft3/s", "m3/s"))
    for one, other in zip(feet["quantiles"], metres["quantiles"], strict=True):
        assert one["flow"] == pytest.approx(other["flow"], rel=1e-9), "the same numbers in another unit"
    assert ("ft3/s", "m3/s") == (feet["flow_unit"], metres["flow_unit"])
    assert feet["log10"]["mean"] == pytest.approx(metres["log10"]["mean"], abs=1e-12)


def test_table_names_unit_bounds_and_low_floods(run: Any, tmp_path: Path) -> None:
    status, out, _ = run(write_example(tmp_path, "b17c_ex2_orestimba82"), "--flow-unit", "ft3/s")
    assert 0 == status
    assert "82 systematic peaks, 82 years in the fit." in out
    assert "30 low floods, below 782 ft³/s (multiple Grubbs-Beck test)." in out
    assert "mean 3.0227, standard deviation 0.6821, station skew -0.929" in out
    assert "flow, ft³/s" in out
    assert "expected" not in out


def test_expected_probability_is_an_extra_and_named_as_such(run: Any, tmp_path: Path) -> None:
    path = write_example(tmp_path, "b17b_ex1_fishkill")
    status, out, _ = run(path, "--expected-probability")
    assert 0 == status
    assert "Expected probability (normal case; Beard, 1960) is an extra beside the fitted curve." in out
    rows = {row["aep"]: row for row in told(run, path)["expected_probability"]}
    # Bulletin 17B (1982), appendix 11: 0.01 (1 + 26 / N^1.16), an approximation good to some percent.
    assert 0.01 * (1 + 26 / 24**1.16) == pytest.approx(rows[0.01]["expected_aep"], rel=0.03)
    flows = {row["aep"]: row["flow"] for row in told(run, path)["quantiles"]}
    assert flows[0.01] < rows[0.01]["flow_expected"]
    assert flows[0.5] == pytest.approx(rows[0.5]["flow_expected"])


def test_analyst_can_set_the_low_flood_threshold_with_a_reason(run: Any, tmp_path: Path) -> None:
    path = write_example(tmp_path, "b17b_ex3_back")
    result = told(
        run, path, "--low-flood-threshold", 1000, "--why", "backwater in 1956", "--flow-unit", "ft3/s"
    )
    low = result["low_outliers"]
    assert (1000.0, 1, True, "backwater in 1956") == (
        low["threshold"],
        low["count"],
        low["set_by_analyst"],
        low["why"],
    )
    status, _, err = run(path, "--low-flood-threshold", 1000)
    assert 2 == status
    assert "needs its reason" in err


def test_intervals_historic_peaks_and_flags_follow_the_rules_of_a_study(run: Any, tmp_path: Path) -> None:
    path = write(
        tmp_path,
        "water_year,flow,low,high,kind,flags\n1900,900,,,historic,\n"
        + "".join(f"{1950 + i},{100 + 13 * i % 170},,,,\n" for i in range(20))
        + "1971,,150,300,,\n1972,5000,,,,dam_break\n",
    )
    spans = write(tmp_path, "first_year,last_year,low\n1890,1949,800\n", "spans.csv")
    result = told(run, path, "--thresholds", spans)
    assert (20, 1, 81) == (result["n_peaks"], result["n_historic"], result["record_years"])
    assert any("1 of 23 rows are left out (1 for: flag dam_break" in text for text in result["warnings"])
    assert [1900, 1971] == sorted(
        row["water_year"] for row in result["plotting_positions"] if row["water_year"] in (1900, 1971, 1972)
    )


@pytest.mark.parametrize(
    ("text", "code", "says"),
    [
        ("water_year,flow\n1990,3\n1990,4\n", 1, "Gauge peaks has this water year in row 2 already."),
        ("water_year,flow\n1990,-3\n1991,x\n", 1, "row 3, column flow, value 'x': A number is expected."),
        ("wateryear,flow\n1990,3\n", 1, "Is it 'wateryear'? Then rename that."),
        ("water_year,flow\n1990,3\n1991,4\n", 1, "The record cannot be fitted: 2 exactly known peaks"),
        ("water_year,flow\n" + "".join(f"{y},7\n" for y in range(1990, 2010)), 1, "cannot be fitted"),
        ("gauge_id,water_year,flow\nA,1990,3\nB,1991,4\n", 1, "The file holds 2 gauges; one is expected."),
        ("water_year;flow\n1990;3\n", 1, "Cells are separated by semicolons."),
        ("", 2, "The file is empty."),
        ("PK\x03\x04", 2, "This is a spreadsheet workbook, not CSV."),
    ],
)
def test_faults_are_told_as_in_a_study(text: str, code: int, says: str, run: Any, tmp_path: Path) -> None:
    status, out, err = run(write(tmp_path, text))
    assert code == status
    assert says in out + err


def test_missing_file_ends_with_2_and_a_guess(run: Any, tmp_path: Path) -> None:
    write(tmp_path, "water_year,flow\n", "peaks.csv")
    status, out, err = run(tmp_path / "peeks.csv")
    assert 2 == status
    assert "There is no such file. Did you mean 'peaks.csv'?" in out + err


@pytest.mark.parametrize(
    "words", [("--skew", "1"), ("--confidence", "1.5"), ("--aep", "1"), ("--flow-unit", "l/s")]
)
def test_useless_options_are_refused(words: tuple[str, str], run: Any, tmp_path: Path) -> None:
    status, _, err = run(write_example(tmp_path, "b17b_ex1_fishkill"), *words)
    assert 2 == status
    assert "Error" in err


def test_help_has_units_and_an_example(run: Any) -> None:
    status, out, _ = run("--help")
    assert 0 == status
    assert "Example: wrackline fit peaks.csv --flow-unit ft3/s" in out
    assert "probabilities are fractions" in " ".join(out.split())


def test_python_takes_tables_and_gives_the_same_numbers(run: Any, tmp_path: Path) -> None:
    path = write_example(tmp_path, "b17b_ex1_fishkill")
    frame = pd.read_csv(path)
    frame["water_year"] = frame["water_year"].astype(float)
    from_frame, from_file = (wrackline.fit(source, flow_unit="ft3/s") for source in (frame, path))
    pd.testing.assert_frame_equal(from_file.quantiles(), from_frame.quantiles())
    assert told(run, path, "--flow-unit", "ft3/s") == from_file.to_dict()
    shuffled = wrackline.fit(frame.sample(frac=1, random_state=3), flow_unit="ft3/s")
    np.testing.assert_allclose(from_file.quantiles()["flow"], shuffled.quantiles()["flow"], rtol=1e-12)


def test_python_raises_every_fault_of_a_table_at_once() -> None:
    frame = pd.DataFrame({"water_year": [1990, 1990, 1991], "flow": [1.0, 2.0, -3.0]})
    with pytest.raises(StudyFaults) as raised:
        wrackline.fit(frame)
    assert {"duplicate_gauge_year", "negative"} == {fault.code for fault in raised.value.problems}
    with pytest.raises(StudyFaults, match="1 problem"):
        wrackline.fit(frame.rename(columns={"flow": "q"}))
