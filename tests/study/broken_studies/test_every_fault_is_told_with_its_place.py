"""The gallery of broken studies: each alters a valid study and states exactly what must be told.

A fault is written as (code, file, row, column, value); a row is the spreadsheet's (the header is row 1).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest

from wrackline.study.checking import check

Told = tuple[str, str, int | None, str | None, str | None]


@dataclass(frozen=True)
class Broken:
    """A way to break the small study, and what the check must tell: nothing more, nothing less."""

    name: str
    breaks: Callable[[Any], object]
    problems: tuple[Told, ...] = ()
    warnings: tuple[Told, ...] = ()
    says: str = ""


def put(file: str, row: int, column: str, value: str) -> Callable[[Any], object]:
    return lambda study: study.put(file, row, column, value)


def add(file: str, **cells: str) -> Callable[[Any], object]:
    return lambda study: study.add(file, **cells)


def key(old: str, new: str) -> Callable[[Any], object]:
    return lambda study: study.set_key(old, new)


def raw(file: str, content: bytes | None) -> Callable[[Any], object]:
    return lambda study: study.raw.update({file: content})


def recoded(file: str, encoding: str, *, old: str = "", new: str = "") -> Callable[[Any], object]:
    return lambda study: study.raw.update({file: study.text(file).replace(old, new, 1).encode(encoding)})


def both(*breaks: Callable[[Any], object]) -> Callable[[Any], object]:
    return lambda study: [one(study) for one in breaks]


def peak(row: int, **cells: str) -> Callable[[Any], object]:
    return lambda study: [study.put("peaks.csv", row, name, value) for name, value in cells.items()]


def ledger(**cells: str) -> Callable[[Any], object]:
    line = {"date": "2025-12-01", "by": "A. Analyst", "why": "as found in the field"} | cells
    return add("ledger.csv", **line)


G, P, T, L = "gauges.csv", "peaks.csv", "targets.csv", "ledger.csv"

STUDY_FILE_CASES = [
    Broken(
        "folder in place of a file",
        both(key("periods: periods.csv", "periods: ."), raw("periods.csv", None)),
        (("unreadable_file", ".", None, None, None),),
    ),
    Broken(
        "column without a name",
        lambda study: [line.append("" if row == 0 else "7") for row, line in enumerate(study.tables[P])],
        (("nameless_column", P, 1, None, None),),
    ),
    Broken(
        "misspelt optional column",
        put(P, 1, "cause", "causes"),
        (),
        (("unused_column", P, 1, "causes", None),),
        says="Is it 'cause'?",
    ),
    Broken(
        "unknown key",
        key("water_year_starts", "water_year_start"),
        (("unknown_key", "study.yaml", 10, "water_year_start", "10"),),
        says="Did you mean 'water_year_starts'?",
    ),
    Broken(
        "unknown key inside",
        key("  periods:", "  period:"),
        (("unknown_key", "study.yaml", 5, "inputs.period", "periods.csv"),),
        says="Did you mean 'periods'?",
    ),
    Broken(
        "unknown unit",
        key("m3/s", "cfs"),
        (("unknown_unit", "study.yaml", 9, "units.flow", "cfs"),),
        says="ft3/s",
    ),
    Broken(
        "wrong type",
        key("starts: 10", "starts: October"),
        (("wrong_type", "study.yaml", 10, "water_year_starts", "October"),),
    ),
    Broken(
        "number where text belongs",
        key("Six invented gauges", "2026"),
        (("wrong_type", "study.yaml", 2, "study.title", "2026"),),
        says='"2026"',
    ),
    Broken(
        "month out of range",
        key("starts: 10", "starts: 13"),
        (("out_of_range", "study.yaml", 10, "water_year_starts", "13"),),
    ),
    Broken(
        "word not known to the configuration",
        key("index_flood:", "pooling:\n  regions: polygon\nindex_flood:"),
        (("unknown_word", "study.yaml", 15, "pooling.regions", "polygon"),),
        says="Did you mean 'polygons'?",
    ),
    Broken(
        "key required and missing",
        key("index_flood:", "pooling:\n  moves: [{gauge_id: '00101', to: north}]\nindex_flood:"),
        (("missing_key", "study.yaml", 15, "pooling.moves.0.why", None),),
    ),
    Broken(
        "attribute named as a column of every study",
        both(key("  rain_mm:", "  region:"), key("[area, rain_mm]", "[area]")),
        (("bad_value", "study.yaml", None, None, None),),
        says="region",
    ),
    Broken(
        "list in place of keys",
        lambda study: setattr(study, "study", "- 1\n"),
        (("not_a_mapping", "study.yaml", None, None, None),),
    ),
    Broken(
        "doubled key",
        key("water_year_starts: 10", "water_year_starts: 10\nwater_year_starts: 7"),
        (("doubled_key", "study.yaml", 11, "water_year_starts", None),),
        says="line 10",
    ),
    Broken(
        "undeclared attribute",
        key("[area, rain_mm]", "[area, rain]"),
        (("bad_value", "study.yaml", None, None, None),),
        says="rain",
    ),
    Broken(
        "several at once",
        both(key("m3/s", "m3"), key("starts: 10", "starts: 0")),
        (
            ("out_of_range", "study.yaml", 10, "water_year_starts", "0"),
            ("unknown_unit", "study.yaml", 9, "units.flow", "m3"),
        ),
    ),
    Broken(
        "YAML syntax",
        key("units: {flow: m3/s, area: km2}", "units: {flow: m3/s, area: km2"),
        (("yaml_syntax", "study.yaml", 10, None, None),),
    ),
    Broken(
        "gauge list not named",
        key("inputs:\n", "inputs:\n  gauges: ''\n"),
        (("missing_file", "study.yaml", 4, "inputs.gauges", None),),
    ),
]

FILE_CASES = [
    Broken(
        "folder in place of a file",
        both(key("periods: periods.csv", "periods: ."), raw("periods.csv", None)),
        (("unreadable_file", ".", None, None, None),),
    ),
    Broken(
        "column without a name",
        lambda study: [line.append("" if row == 0 else "7") for row, line in enumerate(study.tables[P])],
        (("nameless_column", P, 1, None, None),),
    ),
    Broken(
        "misspelt optional column",
        put(P, 1, "cause", "causes"),
        (),
        (("unused_column", P, 1, "causes", None),),
        says="Is it 'cause'?",
    ),
    Broken("missing file", raw("periods.csv", None), (("missing_file", "periods.csv", None, None, None),)),
    Broken(
        "missing file with a near name",
        both(raw(P, None), raw("peak.csv", b"x")),
        (("missing_file", P, None, None, None),),
        says="Did you mean 'peak.csv'?",
    ),
    Broken("empty file", raw(L, b" \n"), (("empty_file", L, None, None, None),)),
    Broken("header only", raw(P, b"gauge_id,water_year,flow\n"), (("no_rows", P, None, None, None),)),
    Broken(
        "missing column",
        lambda study: study.drop_column(P, "flow"),
        (("missing_column", P, 1, "flow", None),),
    ),
    Broken(
        "misspelt column",
        put(G, 1, "latitude", "Latitude_deg"),
        (("missing_column", G, 1, "latitude", None),),
        says="'Latitude_deg'",
    ),
    Broken("duplicate column", put(P, 1, "kind", "flow"), (("duplicate_column", P, 1, "flow", None),)),
    Broken(
        "column of no use",
        put(P, 2, "stage_m", "1.2"),
        (),
        (("unused_column", P, 1, None, None),),
        says="stage_m",
    ),
    Broken("ragged row", lambda study: study.tables[P][9].append("7"), (("ragged_row", P, 10, None, None),)),
    Broken(
        "quotation mark that never closes",
        recoded(P, "utf-8", old="00102", new='"00102'),
        (("bad_quotes", P, 14, None, None),),
    ),
    Broken("UTF-16", recoded(G, "utf-16"), (("utf16", G, None, None, None),)),
    Broken(
        "Windows-1252",
        recoded(G, "cp1252", old="Stream 2", new="Bäch"),
        (("wrong_encoding", G, 3, None, None),),
        says="Windows-1252",
    ),
    Broken(
        "Windows-1251",
        recoded(G, "cp1251", old="Stream 2", new="Река Быстрая"),
        (("wrong_encoding", G, 3, None, None),),
        says="Cyrillic",
    ),
    Broken("NUL byte", recoded(P, "utf-8", old="1992", new="19\0002"), (("nul_byte", P, 3, None, None),)),
    Broken("workbook", raw(G, b"PK\x03\x04rest"), (("not_csv", G, None, None, None),)),
    Broken(
        "semicolons and decimal commas",
        raw(P, b"gauge_id;water_year;flow\n00101;1991;12,5\n"),
        (("wrong_separator", P, 1, None, None),),
        says="decimal comma",
    ),
]

PEAK_CASES = [
    Broken(
        "duplicate gauge-year",
        add(P, gauge_id="00101", water_year="1991", flow="3"),
        (("duplicate_gauge_year", P, 75, "water_year", "1991"),),
        says="row 2",
    ),
    Broken("unknown gauge", peak(75 - 1, gauge_id="00901"), (("unknown_gauge", P, 74, "gauge_id", "00901"),)),
    Broken(
        "lost leading zeros",
        peak(5, gauge_id="101"),
        (("lost_leading_zeros", P, 5, "gauge_id", "101"),),
        says="'00101'",
    ),
    Broken(
        "number with a spreadsheet's decimals",
        peak(5, gauge_id="101.0"),
        (("lost_leading_zeros", P, 5, "gauge_id", "101.0"),),
        says="'00101'",
    ),
    Broken("flow not a number", peak(6, flow="high"), (("not_a_number", P, 6, "flow", "high"),)),
    Broken(
        "bound written into the flow",
        peak(6, flow="<40"),
        (("not_a_number", P, 6, "flow", "<40"),),
        says="`low`",
    ),
    Broken(
        "decimal comma in a cell",
        peak(6, flow="1.234,5"),
        (("decimal_comma", P, 6, "flow", "1.234,5"),),
        says="Write 1234.5.",
    ),
    Broken("negative flow", peak(6, flow="-999"), (("negative", P, 6, "flow", "-999"),)),
    Broken("infinite flow", peak(6, flow="inf"), (("infinite", P, 6, "flow", "inf"),)),
    Broken("flow and bounds", peak(6, high="90"), (("flow_and_bounds", P, 6, "flow", "103"),)),
    Broken("neither flow nor bounds", peak(6, flow=""), (("no_flow", P, 6, "flow", None),)),
    Broken(
        "interval upside down",
        peak(6, flow="", low="90", high="80"),
        (("interval_upside_down", P, 6, "low", "90"),),
    ),
    Broken(
        "date outside its water year",
        peak(6, date="1995-10-01"),
        (("date_outside_water_year", P, 6, "date", "1995-10-01"),),
        says="water year 1996",
    ),
    Broken(
        "partial date outside its water year",
        peak(6, date="1996"),
        (("date_outside_water_year", P, 6, "date", "1996"),),
        says="1996 or 1997",
    ),
    Broken("malformed date", peak(6, date="15/11/1994"), (("malformed_date", P, 6, "date", "15/11/1994"),)),
    Broken(
        "day that does not exist",
        peak(6, date="1995-02-30"),
        (("malformed_date", P, 6, "date", "1995-02-30"),),
    ),
    Broken(
        "date with zeros for the unknown",
        peak(6, date="1995-03-00"),
        (("malformed_date", P, 6, "date", "1995-03-00"),),
        says="'1995-03'",
    ),
    Broken(
        "unknown flag",
        peak(6, flags="estimated regulatd"),
        (("unknown_flag", P, 6, "flags", "regulatd"),),
        says="'regulated'",
    ),
    Broken(
        "unknown cause",
        peak(6, cause="snow_melt"),
        (("unknown_cause", P, 6, "cause", "snow_melt"),),
        says="'snowmelt'",
    ),
    Broken(
        "unknown kind",
        peak(6, kind="historical"),
        (("unknown_kind", P, 6, "kind", "historical"),),
        says="'historic'",
    ),
    Broken(
        "absurd water year", peak(6, water_year="95", date=""), (("absurd_year", P, 6, "water_year", "95"),)
    ),
    Broken(
        "water year beyond all",
        peak(6, water_year="2995", date=""),
        (("absurd_year", P, 6, "water_year", "2995"),),
    ),
    Broken(
        "half a water year",
        peak(6, water_year="1995.5", date=""),
        (("not_a_year", P, 6, "water_year", "1995.5"),),
    ),
    Broken(
        "historic peak below its threshold",
        peak(74, flow="399"),
        (("peak_outside_threshold", P, 74, "flow", "399"),),
        says="thresholds row 2",
    ),
    Broken(
        "peaks above a threshold's upper end",
        add("thresholds.csv", gauge_id="00106", first_year="1991", last_year="1991", low="0", high="150"),
        (("peak_outside_threshold", P, 62, "flow", "201"),),
    ),
    Broken(
        "too few gauges",
        lambda study: study.tables[P].__delitem__(slice(49, None)),
        (("too_few_gauges", P, None, None, None),),
        (("gauges_without_peaks", G, None, None, None),),
    ),
]

SPAN_CASES = [
    Broken(
        "overlapping thresholds",
        add("thresholds.csv", gauge_id="00101", first_year="1955", last_year="1970", low="9"),
        (("overlapping_thresholds", "thresholds.csv", 3, "first_year", "1955"),),
        says="row 2",
    ),
    Broken(
        "overlapping periods",
        add(
            "periods.csv",
            gauge_id="00102",
            first_year="1990",
            last_year="1991",
            state="natural",
            use="true",
            why="x",
        ),
        (("overlapping_periods", "periods.csv", 2, "first_year", "1991"),),
        says="row 3",
    ),
    Broken(
        "span upside down",
        put("periods.csv", 2, "last_year", "1990"),
        (("span_upside_down", "periods.csv", 2, "last_year", "1990"),),
    ),
    Broken(
        "threshold upside down",
        put("thresholds.csv", 2, "high", "300"),
        (("threshold_upside_down", "thresholds.csv", 2, "high", "300"),),
    ),
    Broken(
        "threshold without its low",
        put("thresholds.csv", 2, "low", ""),
        (("blank", "thresholds.csv", 2, "low", None),),
    ),
    Broken(
        "unknown state",
        put("periods.csv", 2, "state", "urbanized"),
        (("unknown_state", "periods.csv", 2, "state", "urbanized"),),
        says="'urbanised'",
    ),
    Broken(
        "unknown boolean",
        put("periods.csv", 2, "use", "no"),
        (("unknown_boolean", "periods.csv", 2, "use", "no"),),
        says="'false'",
    ),
    Broken(
        "period without a reason",
        put("periods.csv", 2, "why", ""),
        (("missing_reason", "periods.csv", 2, "why", None),),
    ),
]

SITE_CASES = [
    Broken(
        "identifiers that differ in leading zeros alone",
        both(put(T, 2, "target_id", "0901"), put(T, 3, "target_id", "901")),
        (),
        (("leading_zero_twins", T, 3, "target_id", "901"),),
        says="row 2",
    ),
    Broken(
        "a gauge too many excluded",
        both(*(ledger(subject="gauge", action="exclude", gauge_id=gauge) for gauge in ("00101", "00103"))),
        (("too_few_gauges", P, None, None, None),),
    ),
    Broken(
        "duplicate gauge",
        both(
            put(G, 7, "gauge_id", "00105"),
            put("redundancy.csv", 2, "other_id", "00104"),
            lambda study: study.tables[P].__delitem__(slice(61, 73)),
        ),
        (("duplicate_id", G, 7, "gauge_id", "00105"),),
        says="row 6",
    ),
    Broken("duplicate target", put(T, 3, "target_id", "T1"), (("duplicate_id", T, 3, "target_id", "T1"),)),
    Broken(
        "target named as a gauge",
        put(T, 2, "target_id", "00103"),
        (("target_is_gauge", T, 2, "target_id", "00103"),),
    ),
    Broken(
        "identifier with a slash",
        put(T, 2, "target_id", "T/1"),
        (("bad_identifier", T, 2, "target_id", "T/1"),),
    ),
    Broken(
        "coordinates swapped beyond doubt",
        both(put(G, 3, "latitude", "-120.80"), put(G, 3, "longitude", "47.10")),
        (("coordinates_swapped", G, 3, "latitude", "-120.80"),),
    ),
    Broken(
        "coordinates swapped within range",
        lambda study: [
            study.put(G, r, c, v)
            for r in range(2, 8)
            for c, v in (
                ("longitude", "10.0" if r != 3 else "47.1"),
                ("latitude", "47.0" if r != 3 else "10.0"),
            )
        ],
        (("coordinates_swapped", G, 3, "latitude", "10.0"),),
    ),
    Broken(
        "longitude with the wrong sign",
        put(G, 3, "longitude", "120.80"),
        (("coordinates_mirrored", G, 3, "longitude", "120.80"),),
    ),
    Broken(
        "coordinates in metres",
        put(G, 3, "latitude", "5220000"),
        (("coordinates_out_of_range", G, 3, "latitude", "5220000"),),
    ),
    Broken(
        "half a centroid",
        put(G, 3, "centroid_longitude", ""),
        (("lone_coordinate", G, 3, "centroid_latitude", "47.15"),),
        (("centroid_from_site", G, None, None, None),),
    ),
    Broken("no area", put(G, 3, "area", ""), (("blank", G, 3, "area", None),)),
    Broken("area zero", put(T, 3, "area", "0"), (("not_positive", T, 3, "area", "0"),)),
    Broken("area negative", put(G, 3, "area", "-4"), (("not_positive", G, 3, "area", "-4"),)),
    Broken(
        "contributing area larger than area",
        put(G, 3, "contributing_area", "151"),
        (("contributing_area_larger", G, 3, "contributing_area", "151"),),
    ),
    Broken(
        "missing attribute at a gauge",
        put(G, 3, "rain_mm", ""),
        (("missing_attribute", G, 3, "rain_mm", None),),
    ),
    Broken(
        "missing attribute at a target",
        put(T, 3, "rain_mm", ""),
        (("missing_attribute", T, 3, "rain_mm", None),),
    ),
    Broken(
        "missing attribute that nothing uses",
        put(T, 3, "lakes_pct", ""),
        (),
        (("missing_attribute", T, None, "lakes_pct", None),),
    ),
    Broken(
        "attribute outside its limits",
        put(G, 3, "lakes_pct", "104"),
        (("attribute_outside_limits", G, 3, "lakes_pct", "104"),),
        says="from 0 to 100 %",
    ),
    Broken(
        "logarithm of zero",
        put(T, 2, "rain_mm", "0"),
        (("attribute_invalid_for_transform", T, 2, "rain_mm", "0"),),
    ),
    Broken(
        "attribute column missing",
        lambda study: study.drop_column(T, "rain_mm"),
        (("missing_column", T, 1, "rain_mm", None),),
    ),
    Broken(
        "column missing of an attribute that nothing uses",
        lambda study: study.drop_column(T, "lakes_pct"),
        (),
        (("missing_column", T, 1, "lakes_pct", None),),
    ),
    Broken(
        "regulated neither true nor false",
        put(G, 4, "regulated", "maybe"),
        (("unknown_boolean", G, 4, "regulated", "maybe"),),
    ),
    Broken(
        "gauge without a region",
        put(G, 4, "region", ""),
        (),
        (("gauge_without_region", G, 4, "region", None),),
    ),
    Broken(
        "target without a region", put(T, 3, "region", ""), (("target_without_region", T, 3, "region", None),)
    ),
    Broken(
        "target in a region without gauges",
        put(T, 3, "region", "nroth"),
        (("unknown_region", T, 3, "region", "nroth"),),
        says="'north'",
    ),
    Broken(
        "unknown upstream gauge",
        put(T, 3, "upstream_gauge", "00107"),
        (("unknown_gauge", T, 3, "upstream_gauge", "00107"),),
    ),
    Broken(
        "pair with an unknown gauge",
        put("redundancy.csv", 2, "other_id", "00199"),
        (("unknown_gauge", "redundancy.csv", 2, "other_id", "00199"),),
    ),
    Broken(
        "pair of a gauge with itself",
        both(put("redundancy.csv", 2, "other_id", "00105")),
        (("pair_with_itself", "redundancy.csv", 2, "other_id", "00105"),),
    ),
    Broken(
        "pair that keeps a third gauge",
        put("redundancy.csv", 2, "keep", "00101"),
        (("unknown_keep", "redundancy.csv", 2, "keep", "00101"),),
    ),
    Broken(
        "pair decided twice",
        add("redundancy.csv", gauge_id="00106", other_id="00105", keep="both", why="again"),
        (("duplicate_pair", "redundancy.csv", 3, "other_id", "00105"),),
    ),
    Broken(
        "move of an unknown gauge",
        key("index_flood:", "pooling:\n  moves: [{gauge_id: '0010', to: north, why: test}]\nindex_flood:"),
        (("unknown_gauge", "study.yaml", 15, "pooling.moves.0.gauge_id", "0010"),),
    ),
]

LEDGER_CASES = [
    Broken(
        "ledger points at a year without a peak",
        ledger(subject="peak", action="exclude", gauge_id="00101", water_year="1951"),
        (("points_at_nothing", L, 4, "water_year", "1951"),),
    ),
    Broken(
        "ledger names no gauge",
        ledger(subject="gauge", action="exclude"),
        (("points_at_nothing", L, 4, "gauge_id", None),),
    ),
    Broken(
        "ledger points at a gauge without a threshold",
        ledger(subject="threshold", action="set", gauge_id="00102", value="40"),
        (("points_at_nothing", L, 4, "gauge_id", "00102"),),
    ),
    Broken(
        "ledger names an unknown gauge",
        ledger(subject="gauge", action="keep", gauge_id="00107"),
        (("unknown_gauge", L, 4, "gauge_id", "00107"),),
    ),
    Broken("ledger without a reason", put(L, 2, "why", ""), (("missing_reason", L, 2, "why", None),)),
    Broken("ledger without an author", put(L, 2, "by", ""), (("missing_author", L, 2, "by", None),)),
    Broken(
        "unknown subject",
        put(L, 3, "subject", "gage"),
        (("unknown_subject", L, 3, "subject", "gage"),),
        says="'gauge'",
    ),
    Broken(
        "unknown action",
        put(L, 2, "action", "excluded"),
        (("unknown_action", L, 2, "action", "excluded"),),
        says="'exclude'",
    ),
    Broken(
        "ledger's day in part", put(L, 2, "date", "2025-11"), (("malformed_date", L, 2, "date", "2025-11"),)
    ),
    Broken(
        "interval without dots",
        ledger(subject="peak", action="set_interval", gauge_id="00101", water_year="1991", value="3-9"),
        (("bad_value", L, 4, "value", "3-9"),),
        says="120..300",
    ),
    Broken(
        "two decisions on one thing on one day",
        ledger(date="2025-11-03", subject="peak", action="keep", gauge_id="00103", water_year="1991"),
        (("contradiction", L, 4, "subject", "peak"),),
    ),
    Broken(
        "move to a region that no site has",
        ledger(subject="region", action="move", gauge_id="00101", value="nort"),
        (),
        (("new_region", L, 4, "value", "nort"),),
        says="'north'",
    ),
]

CASES = [*STUDY_FILE_CASES, *FILE_CASES, *PEAK_CASES, *SPAN_CASES, *SITE_CASES, *LEDGER_CASES]


@pytest.mark.parametrize("broken", CASES, ids=lambda broken: broken.name)
def test_the_check_tells_exactly_the_faults(broken: Broken, small_study: Any, tmp_path: Path) -> None:
    broken.breaks(small_study)
    found = check(small_study.write(tmp_path))
    told = [
        [(f.code, f.file, f.row, f.column, f.value) for f in part]
        for part in (found.problems, found.warnings)
    ]
    assert [sorted(broken.problems, key=str), sorted(broken.warnings, key=str)] == [
        sorted(p, key=str) for p in told
    ]
    assert broken.says in " ".join(f"{f.problem} {f.mend}" for f in (*found.problems, *found.warnings))


def test_the_unbroken_study_is_clean(small_study: Any, tmp_path: Path) -> None:
    found = check(small_study.write(tmp_path))
    assert (found.problems, found.warnings, found.exit_status) == ((), (), 0)


def test_faults_of_all_files_are_told_together(small_study: Any, tmp_path: Path) -> None:
    chosen = ("flow not a number", "unknown state", "area zero", "ledger without a reason")
    for broken in CASES:
        if broken.name in chosen:
            broken.breaks(small_study)
    found = check(small_study.write(tmp_path))
    assert [f.file for f in found.problems] == ["ledger.csv", "peaks.csv", "periods.csv", "targets.csv"]
    assert found.exit_status == 1
    assert {"study.yaml", *small_study.tables} == {path.name for path in tmp_path.iterdir()}
