"""Public retrievals become a study's tables: invented gauges in the public form, one trap at a time."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pandas as pd
import pytest

import wrackline
from wrackline.study.faults import StudyFaults
from wrackline.study.importing import ImportedPeaks
from wrackline.study.loading import UnreadableStudy

HEADER = (
    "agency_cd\tsite_no\tpeak_dt\tpeak_tm\tpeak_va\tpeak_cd\tgage_ht\tgage_ht_cd\tyear_last_pk\tag_dt\tag_tm\t"
    "ag_gage_ht\tag_gage_ht_cd"
)
WIDTHS = "5s\t15s\t10d\t6s\t8s\t33s\t8s\t27s\t4s\t10d\t6s\t8s\t27s"
SITE_HEADER = "agency_cd\tsite_no\tstation_nm\tsite_tp_cd\tdec_lat_va\tdec_long_va\tdrain_area_va\tcontrib_drain_area_va"
SITE_WIDTHS = "5s\t15s\t50s\t7s\t16s\t16s\t8s\t8s"


def peak(
    date: str, flow: str, codes: str = "", stage: str = "", *, site: str = "00990100", since: str = ""
) -> str:
    return "\t".join(["USGS", site, date, "", flow, codes, stage, "", since, "", "", "", ""])


def retrieval(*rows: str, head: str = "#\n# Invented.\n", end: str = "\n") -> bytes:
    return (head.replace("\n", end) + end.join([HEADER, WIDTHS, *rows]) + end).encode()


def sites(*rows: str) -> bytes:
    return ("# Invented sites\n" + "\n".join([SITE_HEADER, SITE_WIDTHS, *rows]) + "\n").encode()


def read(folder: Path, *contents: bytes, **options: Any) -> ImportedPeaks:
    paths = []
    for number, content in enumerate(contents, start=1):
        paths.append(folder / f"file{number}.txt")
        paths[-1].write_bytes(content)
    return wrackline.import_peaks(paths, folder / "study", **options)


def row_of(done: ImportedPeaks, water_year: int, gauge_id: str = "00990100") -> dict[str, Any]:
    written = pd.read_csv(done.written[0], dtype=str, keep_default_na=False)
    chosen = written[(written["gauge_id"] == gauge_id) & (written["water_year"] == str(water_year))]
    assert 1 == len(chosen)
    return chosen.iloc[0].to_dict()


def told(done: ImportedPeaks) -> set[str]:
    return {warning.code for warning in done.warnings}


@pytest.mark.parametrize(
    ("code", "expected"),
    [
        ("", {"flow": "1200"}),
        ("1", {"flow": "1200", "flags": "daily_mean"}),
        ("2", {"flow": "1200", "flags": "estimated"}),
        ("3", {"flow": "1200", "flags": "dam_break"}),
        ("4", {"high": "1200"}),
        ("5", {"flow": "1200", "flags": "regulation_unknown"}),
        ("6", {"flow": "1200", "flags": "regulated_or_diverted"}),
        ("7", {"flow": "1200", "kind": "historic"}),
        ("8", {"low": "1200"}),
        ("9", {"flow": "1200", "cause": "unknown", "flags": "cause_unspecified"}),
        ("A", {"flow": "1200", "flags": "date_uncertain"}),
        ("B", {"flow": "1200", "flags": "date_uncertain"}),
        ("Bd", {"flow": "1200", "flags": "date_uncertain"}),
        ("Bm", {"flow": "1200", "flags": "date_uncertain"}),
        ("C", {"flow": "1200", "flags": "basin_changed"}),
        ("D", {"flow": "1200"}),
        ("E", {"flow": "1200"}),
        ("F", {"flow": "1200"}),
        ("O", {"flow": "1200", "flags": "unsystematic"}),
        ("R", {"flow": "1200", "flags": "revised"}),
        ("2,5,8", {"low": "1200", "flags": "estimated regulation_unknown"}),
        ("7,Bd", {"flow": "1200", "kind": "historic", "flags": "date_uncertain"}),
        (" 2, 6 ,2", {"flow": "1200", "flags": "estimated regulated_or_diverted"}),
    ],
)
def test_codes_become_columns_and_flags(code: str, expected: dict[str, str], tmp_path: Path) -> None:
    done = read(tmp_path, retrieval(peak("1936-03-18", "1200", code)))
    plain = dict.fromkeys(("flow", "low", "high", "cause", "flags"), "") | {"kind": "systematic"}
    row = row_of(done, 1936)
    assert plain | expected == {name: row[name] for name in plain}
    reason = done.account["reason"].iloc[0]
    for word in code.replace(" ", "").split(","):
        assert (f"code {word} (" in reason) == bool(word)


def test_an_unknown_code_is_told_and_noted(tmp_path: Path) -> None:
    done = read(tmp_path, retrieval(peak("1936-03-18", "1200", "2,Z")))
    assert "unknown_code" in told(done)
    assert "code Z: not known here, noted only" in done.account["reason"].iloc[0]
    assert {"2": 1, "Z": 1} == done.codes


def test_contradicting_codes_are_left_out_and_told(tmp_path: Path) -> None:
    done = read(tmp_path, retrieval(peak("1936-03-18", "1200", "4,8"), peak("1937-03-18", "900")))
    assert ["left out", "peak"] == done.account["fate"].tolist()
    assert "left_out" in told(done)


@pytest.mark.parametrize(
    ("date", "water_year", "written", "flags"),
    [
        ("1936-09-30", 1936, "1936-09-30", ""),
        ("1936-10-01", 1937, "1936-10-01", ""),
        ("1936-03", 1936, "1936-03", ""),
        ("1936-03-00", 1936, "1936-03", ""),
        ("1936-12-00", 1937, "1936-12", ""),
        ("1881-00-00", 1881, "1881", "date_uncertain"),
        ("1939", 1939, "1939", "date_uncertain"),
    ],
)
def test_dates_give_the_water_year(
    date: str, water_year: int, written: str, flags: str, tmp_path: Path
) -> None:
    done = read(tmp_path, retrieval(peak(date, "1200")))
    row = row_of(done, water_year)
    assert (written, flags) == (row["date"], row["flags"])
    assert (len(written) == 4) == ("water_year_uncertain" in told(done))


def test_the_water_year_can_start_in_another_month(tmp_path: Path) -> None:
    done = read(tmp_path, retrieval(peak("1936-10-01", "1200")), water_year_starts=1)
    assert "1200" == row_of(done, 1936)["flow"]
    assert "water_year_starts: 1 " in (tmp_path / "study" / "study.yaml").read_text(encoding="utf-8")


def test_a_peak_without_a_date_is_left_out_and_told(tmp_path: Path) -> None:
    done = read(tmp_path, retrieval(peak("", "1200"), peak("1937-03-18", "900")))
    assert "no date: the water year of the peak is not known" == done.account["reason"].iloc[0]
    assert "no_date" in told(done)


def test_a_gauge_height_without_discharge_says_that_a_flood_happened(tmp_path: Path) -> None:
    done = read(
        tmp_path,
        retrieval(peak("1869-07", "", "7", "42.30"), peak("1881-00-00", "", "", "22.90"), peak("1882", "")),
        retrieval(peak("1937-03-18", "900")),
    )
    assert [
        "no discharge, only a gauge height of 42.30 ft: a historic flood happened, its flow is not known",
        "no discharge, only a gauge height of 22.90 ft: a flood happened, its flow is not known",
        "no discharge and no gauge height",
        "taken as it stands",
    ] == done.account["reason"].tolist()
    (warning,) = (w for w in done.warnings if w.code == "gauge_height_only")
    assert "1869-07: 42.30 ft, historic, 1881: 22.90 ft" in warning.problem


def test_the_larger_of_two_peaks_in_a_water_year_is_kept(tmp_path: Path) -> None:
    done = read(tmp_path, retrieval(peak("1935-11-02", "800"), peak("1936-03-18", "1200")))
    assert "1200" == row_of(done, 1936)["flow"]
    assert ["left out", "peak"] == done.account["fate"].tolist()
    assert (
        "a larger peak of water year 1936 (1200, 1936-03-18) stands in file1.txt row 6"
        in (done.account["reason"].iloc[0])
    )
    assert "two_peaks_in_a_year" in told(done)


def test_a_historic_and_a_systematic_peak_in_one_year_are_told_apart(tmp_path: Path) -> None:
    done = read(tmp_path, retrieval(peak("1935-11-02", "800"), peak("1936-03-18", "1200", "7")))
    assert "the one kept is historic, this one systematic" in done.account["reason"].iloc[0]
    (warning,) = (w for w in done.warnings if w.code == "two_peaks_in_a_year")
    assert "set `kind` to systematic" in warning.mend


def test_a_bound_above_outranks_the_same_value_and_a_bound_below_ranks_last(tmp_path: Path) -> None:
    rows = [
        peak("1935-11-02", "800"),
        peak("1936-03-18", "800", "8"),
        peak("1936-11-02", "500", "4"),
        peak("1937-03-18", "300"),
    ]
    done = read(tmp_path, retrieval(*rows))
    assert "800" == row_of(done, 1936)["low"]
    assert "300" == row_of(done, 1937)["flow"]


def test_a_revised_value_supersedes_the_other_of_the_same_day(tmp_path: Path) -> None:
    done = read(tmp_path, retrieval(peak("1936-03-18", "1300")), retrieval(peak("1936-03-18", "1200", "R")))
    assert "1200" == row_of(done, 1936)["flow"]
    assert "superseded by the revised value 1200" in done.account["reason"].iloc[0]


def test_the_same_peak_in_two_files_is_merged_with_the_codes_of_both(tmp_path: Path) -> None:
    done = read(
        tmp_path, retrieval(peak("1936-03-18", "1200")), retrieval(peak("1936-03-18", "1200.0", "5,7"))
    )
    row = row_of(done, 1936)
    assert ("historic", "regulation_unknown") == (row["kind"], row["flags"])
    assert ["peak", "merged"] == done.account["fate"].tolist()
    assert "joined with file2.txt row 5: code 5" in done.account["reason"].iloc[0]


def test_smallest_recordable_flows_become_thresholds_of_their_years(tmp_path: Path) -> None:
    rows = [peak(f"{year}-03-01", "50", "4") for year in (1960, 1961, 1963)]
    rows += [peak("1962-03-01", "120"), peak("1964-03-01", "60", "4"), peak("1965-03-01", "0", "4")]
    done = read(tmp_path, retrieval(*rows))
    assert [(1960, 1961, "50"), (1963, 1963, "50"), (1964, 1964, "60")] == [
        tuple(row) for row in done.thresholds[["first_year", "last_year", "low"]].to_numpy().tolist()
    ]


def test_highest_since_is_told_and_makes_no_threshold(tmp_path: Path) -> None:
    done = read(tmp_path, retrieval(peak("1936-03-18", "1200", "7", since="1902")))
    assert {"highest_since", "historic_without_threshold"} <= told(done)
    assert 0 == len(done.thresholds)


def test_several_gauges_and_header_blocks_in_one_file(tmp_path: Path) -> None:
    first = retrieval(peak("1936-03-18", "1200"), peak("1936-04-18", "20", site="00990200"))
    second = retrieval(peak("1936-03-19", "77", site="00990150000000001"), head="# more\n\n")
    sites_too = sites("USGS\t00990200\tBROOK\tST\t40.5\t-80.25\t12.5\t")
    done = read(tmp_path, first + second + sites_too)
    assert ["00990100", "00990150000000001", "00990200"] == done.gauges["gauge_id"].tolist()
    assert ("BROOK", 40.5, -80.25, 12.5) == tuple(
        done.gauges.iloc[2][["name", "latitude", "longitude", "area"]]
    )
    assert ["peak", "peak", "peak", "gauge"] == done.account["fate"].tolist()


def test_windows_line_ends_short_rows_and_a_commented_width_row(tmp_path: Path) -> None:
    text = f"# Head\r\n\r\n{HEADER}\tmodify_dt\r\n#{WIDTHS}\r\nUSGS\t00990100\t1936-03-18\t\t1200\r\n"
    done = read(tmp_path, text.encode())
    assert "1200" == row_of(done, 1936)["flow"]
    assert 1 == len(done.account)
    assert set() == told(done) - {"to_fill_in"}


def test_a_file_cut_off_in_its_last_row_is_told(tmp_path: Path) -> None:
    whole = retrieval(peak("1936-03-18", "1200"), peak("1937-03-18", "34500"))
    done = read(tmp_path, whole[: whole.rindex(b"00") - 1])
    assert "cut_off" in told(done)


def test_names_in_latin_1_are_read_and_told(tmp_path: Path) -> None:
    head = "# Sites in this file include:\n#  USGS 00990100 Río Inventado at Peña, ZZ\n#\n"
    done = read(tmp_path, retrieval(peak("1936-03-18", "1200"), head=head).decode().encode("latin-1"))
    assert "Río Inventado at Peña, ZZ" == done.gauges["name"].iloc[0]
    assert "wrong_encoding" in told(done)


def test_site_lists_fill_the_stub_and_the_rest_is_named(tmp_path: Path) -> None:
    listed = sites(
        "USGS\t00990100\tINVENTED RIVER AT MILL, ZZ\tST\t 38.99\t-75.78\t 113\t 100.5",
        "USGS\t00990900\tELSEWHERE\tST\t38\t-75\t1\t",
    )
    done = read(
        tmp_path, retrieval(peak("1936-03-18", "9"), peak("1936-03-18", "7", site="00990200")), listed
    )
    assert ["INVENTED RIVER AT MILL, ZZ", 38.99, -75.78, 113.0, 100.5] == done.gauges.iloc[0][
        ["name", "latitude", "longitude", "area", "contributing_area"]
    ].tolist()
    assert ["peak", "peak", "gauge", "left out"] == done.account["fate"].tolist()
    lacking = {w.column: w.problem for w in done.warnings if w.code == "to_fill_in"}
    assert {"name", "latitude", "longitude", "area"} == set(lacking)
    assert "Blank for 1 of 2 gauges: 00990200." == lacking["area"]


def test_two_site_lists_are_joined_and_differences_told(tmp_path: Path) -> None:
    done = read(
        tmp_path,
        sites("USGS\t00990100\tA\tST\t38.9\t-75.7\t\t"),
        sites("USGS\t00990100\tB\tST\t38.9\t-75.7\t113\t"),
    )
    assert ("A", 113.0) == tuple(done.gauges.iloc[0][["name", "area"]])
    assert ["gauge", "merged"] == done.account["fate"].tolist()
    assert "sites_differ" in told(done)


def test_the_account_has_a_line_for_every_row_of_every_file(tmp_path: Path) -> None:
    rows = [
        peak(f"{1900 + n}-0{1 + n % 9}-11", str(n) if n % 4 else "", "7" if n % 5 else "") for n in range(60)
    ]
    done = read(
        tmp_path, retrieval(*rows), retrieval(*rows[20:50]), sites("USGS\t00990100\tA\tST\t38\t-75\t1\t")
    )
    assert {"file1.txt": 60, "file2.txt": 30, "file3.txt": 1} == done.account["file"].value_counts().to_dict()
    assert not done.account.duplicated(["file", "row"]).any()
    assert len(done.peaks) == (done.account["fate"] == "peak").sum()
    assert (done.account["reason"] != "").all()


def test_the_order_of_files_and_rows_does_not_matter(tmp_path: Path) -> None:
    rows = [peak(f"{1900 + n}-03-11", str(50 + n), site=f"0099010{n % 3}") for n in range(30)]
    (tmp_path / "a").mkdir()
    (tmp_path / "b").mkdir()
    one = read(tmp_path / "a", retrieval(*rows))
    other = read(tmp_path / "b", retrieval(*rows[::-1]))
    assert one.written[0].read_bytes() == other.written[0].read_bytes()


@pytest.mark.parametrize(
    ("row", "code"),
    [
        (peak("3/18/1936", "1200"), "malformed_date"),
        (peak("1936-02-30", "1200"), "malformed_date"),
        (peak("1936-13-01", "1200"), "malformed_date"),
        (peak("1936-03-18", "1,200"), "not_a_number"),
        (peak("1936-03-18", "-999999"), "negative"),
        (peak("1936-03-18", "nan"), "not_a_number"),
        (peak("1936-03-18", "1200", site=""), "blank"),
        (peak("1936-03-18", "1200", site="99 01"), "bad_identifier"),
        (peak("1936-03-18", "1200", site="990100"), "lost_leading_zeros"),
        (peak("1936-03-18", "1200") + "\tmore\tcells", "ragged_row"),
    ],
)
def test_bad_rows_of_all_files_are_told_with_their_place_and_nothing_is_written(
    row: str, code: str, tmp_path: Path
) -> None:
    with pytest.raises(StudyFaults) as caught:
        read(tmp_path, retrieval(peak("1935-03-18", "800"), row), retrieval(row))
    assert [(code, "file1.txt", 6), (code, "file2.txt", 5)] == [
        (fault.code, fault.file, fault.row) for fault in caught.value.problems
    ]
    assert not isinstance(caught.value, UnreadableStudy)
    assert not (tmp_path / "study").exists()


@pytest.mark.parametrize(
    ("content", "code"),
    [
        (b"", "empty_file"),
        (b"  \r\n \n", "empty_file"),
        (b"<!DOCTYPE html><html><title>502 Bad Gateway</title></html>", "web_page"),
        (b'{"error": "no such site"}', "web_page"),
        (bytes(range(256)), "not_text"),
        (b"PK\x03\x04rest of a workbook", "not_text"),
        (b"\x1f\x8b\x08packed", "not_text"),
        ("agency_cd\tsite_no".encode("utf-16"), "not_text"),
    ],
)
def test_what_cannot_be_read_at_all_is_told_with_all_other_problems(
    content: bytes, code: str, tmp_path: Path
) -> None:
    with pytest.raises(UnreadableStudy) as caught:
        read(tmp_path, content, retrieval(peak("x", "1200")))
    assert [code, "malformed_date"] == [fault.code for fault in caught.value.problems]


@pytest.mark.parametrize(
    ("content", "code", "words"),
    [
        (b"#\n# No sites found matching all criteria\n", "no_rows", "No sites found matching all criteria"),
        (retrieval(), "no_rows", "no rows of data"),
        ((HEADER.replace("\t", ",") + "\n").encode(), "wrong_separator", "not parted by tabulators"),
        (b"agency_cd\tsite_no\tdatetime\t01_00060\n5s\t15s\t20d\t14n\nUSGS\t00990100\t2001-01-01\t12\n", "not_peaks", "neither"),
        (b"Dear colleague,\nplease find the peaks attached.\n", "unknown_form", "Dear colleague"),
    ],
)  # fmt: skip
def test_other_files_are_told_by_what_they_are(content: bytes, code: str, words: str, tmp_path: Path) -> None:
    with pytest.raises(StudyFaults) as caught:
        read(tmp_path, content)
    (fault,) = caught.value.problems
    assert code == fault.code
    assert words in fault.problem
    assert fault.mend


def test_zero_flow_is_a_flow(tmp_path: Path) -> None:
    assert "0" == row_of(read(tmp_path, retrieval(peak("1936-03-18", "0"))), 1936)["flow"]
