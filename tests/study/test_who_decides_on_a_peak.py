"""Ledger over periods over flags over defaults; and what is then known of every year."""

from __future__ import annotations

import math
import random
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from wrackline.study.faults import StudyFaults
from wrackline.study.inputs import Study, read_study

P = "peaks.csv"


def read(study: Any, folder: Path) -> Study:
    return read_study(study.write(folder))


def line(study: Study, row: int) -> tuple[str, str]:
    accounting = study.accounting.set_index("row")
    return accounting.loc[row, "fate"], accounting.loc[row, "decided_by"]


def known(study: Study, gauge: str, year: int) -> tuple[float, float, float, float] | None:
    """Flow interval and perception threshold of one gauge's year; None when it has no row."""
    records = study.records
    at = np.flatnonzero(
        (records.gauge_index == records.gauge_ids.index(gauge)) & (records.water_year == year)
    )
    if len(at) == 0:
        return None
    names = ("flow_low", "flow_high", "perception_low", "perception_high")
    return tuple(float(getattr(records, name)[at[0]]) for name in names)  # type: ignore[return-value]


def decide(study: Any, **cells: str) -> None:
    study.add("ledger.csv", **({"date": "2025-12-01", "by": "A. Analyst", "why": "seen"} | cells))


def test_every_row_is_accounted_for_once(small_study: Any, tmp_path: Path) -> None:
    study = read(small_study, tmp_path)
    assert list(range(2, 75)) == study.accounting["row"].tolist()
    assert {"used": 70, "excluded": 3} == study.accounting["fate"].value_counts().to_dict()


@pytest.mark.parametrize(
    ("flags", "fate", "decided_by"),
    [
        ("", "used", "default"),
        ("estimated", "used", "default"),
        ("dam_break", "excluded", "flag dam_break"),
        ("daily_mean", "interval", "flag daily_mean"),
        ("daily_mean regulated", "excluded", "flag regulated"),
    ],
)
def test_flags_win_over_defaults(
    flags: str, fate: str, decided_by: str, small_study: Any, tmp_path: Path
) -> None:
    small_study.put(P, 4, "flags", flags)
    assert (fate, decided_by) == line(read(small_study, tmp_path), 4)


@pytest.mark.parametrize(
    ("use", "flags", "fate", "decided_by"),
    [
        ("false", "", "excluded", "periods.csv"),
        ("false", "dam_break", "excluded", "periods.csv"),
        ("true", "dam_break", "used", "periods.csv"),
        ("true", "dam_break daily_mean", "interval", "periods.csv"),
        ("true", "daily_mean", "interval", "flag daily_mean"),
        ("true", "", "used", "default"),
    ],
)
def test_periods_win_over_flags(
    use: str, flags: str, fate: str, decided_by: str, small_study: Any, tmp_path: Path
) -> None:
    small_study.put("periods.csv", 2, "use", use)
    small_study.put(P, 14, "flags", flags)
    assert (fate, decided_by) == line(read(small_study, tmp_path), 14)


@pytest.mark.parametrize(
    ("action", "value", "fate"),
    [
        ("keep", "", "used"),
        ("exclude", "", "excluded"),
        ("set_flow", "77", "used"),
        ("set_interval", "70..", "interval"),
    ],
)
def test_the_ledger_wins_over_all(
    action: str, value: str, fate: str, small_study: Any, tmp_path: Path
) -> None:
    small_study.put(P, 14, "flags", "dam_break")
    decide(small_study, subject="peak", action=action, gauge_id="00102", water_year="1991", value=value)
    study = read(small_study, tmp_path)
    assert (fate, "ledger") == line(study, 14)
    assert "ledger: seen" == study.accounting.set_index("row").loc[14, "reason"]


def test_a_later_decision_supersedes_an_earlier_one(small_study: Any, tmp_path: Path) -> None:
    decide(small_study, subject="peak", action="keep", gauge_id="00103", water_year="1991")
    study = read(small_study, tmp_path)
    assert ("used", "ledger") == line(study, 26)
    assert ["superseded by row 4", "gauge 00104 kept, whatever the screening says"] == study.ledger["effect"][
        :2
    ].tolist()


def test_the_ledger_states_its_effects_in_the_declared_unit(small_study: Any, tmp_path: Path) -> None:
    small_study.set_key("flow: m3/s", "flow: ft3/s")
    decide(
        small_study,
        subject="peak",
        action="set_interval",
        gauge_id="00101",
        water_year="1992",
        value="50..90.5",
    )
    decide(small_study, subject="threshold", action="set", gauge_id="00101", value="410")
    decide(small_study, subject="region", action="move", gauge_id="00101", value="north")
    decide(small_study, subject="model", action="use the map", why="agreed")
    assert {
        "peak 141 ft3/s of 1991 at gauge 00103 excluded",
        "gauge 00104 kept, whatever the screening says",
        "peak 108 ft3/s of 1992 at gauge 00101 set to between 50 and 90.5 ft3/s",
        "threshold of gauge 00101 set to 410 ft3/s in 21 years",
        "gauge 00101 moved to region north",
        "recorded",
    } == set(read(small_study, tmp_path).ledger["effect"])


def test_a_systematic_peak_without_a_threshold_would_always_be_on_record(
    small_study: Any, tmp_path: Path
) -> None:
    assert (108.0, 108.0, 0.0, math.inf) == known(read(small_study, tmp_path), "00101", 1992)


def test_silent_years_of_a_threshold_stayed_below_it(small_study: Any, tmp_path: Path) -> None:
    study = read(small_study, tmp_path)
    assert (0.0, 400.0, 400.0, math.inf) == known(study, "00101", 1940)
    assert (500.0, 500.0, 400.0, math.inf) == known(study, "00101", 1950)
    assert known(study, "00101", 1961) is None
    assert 20 == (~study.records.observed).sum()
    assert 1 == study.records.historic.sum()


def test_years_that_have_not_come_are_not_taken_as_years_without_a_flood(
    small_study: Any, tmp_path: Path
) -> None:
    latest = max(int(row[1]) for row in small_study.tables[P][1:])
    small_study.add("thresholds.csv", gauge_id="00106", first_year="1980", last_year=str(latest), low="90")
    small_study.add("thresholds.csv", gauge_id="00105", first_year="1980", last_year="2040", low="90")
    with pytest.raises(StudyFaults) as told:
        read(small_study, tmp_path)
    assert [("threshold_beyond_peaks", 4)] == [
        (fault.code, fault.row) for fault in told.value.problems if fault.file == "thresholds.csv"
    ]


def test_an_excluded_peak_does_not_become_a_silent_year(small_study: Any, tmp_path: Path) -> None:
    small_study.put(P, 74, "flags", "dam_break")
    assert known(read(small_study, tmp_path), "00101", 1950) is None


def test_silent_years_of_an_unused_period_are_left_out(small_study: Any, tmp_path: Path) -> None:
    span = {"first_year": "1955", "last_year": "1958", "state": "moved", "use": "false", "why": "other site"}
    small_study.add("periods.csv", gauge_id="00101", **span)
    study = read(small_study, tmp_path)
    assert known(study, "00101", 1954) is not None
    assert known(study, "00101", 1955) is None
    assert 16 == (~study.records.observed).sum()


@pytest.mark.parametrize(("low", "high"), [("0", ""), ("400", "900")], ids=["from zero", "bounded above"])
def test_nothing_follows_from_silence_under_such_thresholds(
    low: str, high: str, small_study: Any, tmp_path: Path
) -> None:
    small_study.put("thresholds.csv", 2, "low", low)
    small_study.put("thresholds.csv", 2, "high", high)
    assert 0 == (~read(small_study, tmp_path).records.observed).sum()


def test_a_historic_peak_without_a_threshold_is_left_out(small_study: Any, tmp_path: Path) -> None:
    small_study.put("thresholds.csv", 2, "last_year", "1949")
    study = read(small_study, tmp_path)
    assert ("excluded", "default") == line(study, 74)
    assert "thresholds.csv" in study.accounting.set_index("row").loc[74, "reason"]


@pytest.mark.parametrize("flags", ["", "unsystematic"])
def test_a_period_in_use_does_not_stand_for_a_missing_threshold(
    flags: str, small_study: Any, tmp_path: Path
) -> None:
    small_study.put("thresholds.csv", 2, "last_year", "1949")
    small_study.put(P, 74, "flags", flags)
    small_study.add(
        "periods.csv",
        gauge_id="00101", first_year="1940", last_year="1960", state="natural", use="true", why="no dam yet",
    )  # fmt: skip
    study = read(small_study, tmp_path)
    assert ("excluded", "default") == line(study, 74)
    assert known(study, "00101", 1950) is None


def test_the_ledger_can_give_one_year_a_threshold(small_study: Any, tmp_path: Path) -> None:
    small_study.put("thresholds.csv", 2, "last_year", "1949")
    decide(small_study, subject="threshold", action="set", gauge_id="00101", water_year="1950", value="450")
    assert (500.0, 500.0, 450.0, math.inf) == known(read(small_study, tmp_path), "00101", 1950)


def test_the_ledger_threshold_of_a_year_wins_over_that_of_the_gauge(small_study: Any, tmp_path: Path) -> None:
    decide(small_study, subject="threshold", action="set", gauge_id="00101", water_year="1941", value="300")
    decide(small_study, subject="threshold", action="set", gauge_id="00101", value="350", date="2025-12-02")
    study = read(small_study, tmp_path)
    assert (0.0, 300.0, 300.0, math.inf) == known(study, "00101", 1941)
    assert (0.0, 350.0, 350.0, math.inf) == known(study, "00101", 1942)


@pytest.mark.parametrize(
    ("cells", "expected"),
    [
        ({"flow": "", "low": "80"}, (80.0, math.inf, 0.0, math.inf)),
        ({"flow": "", "low": "80", "high": "95"}, (80.0, 95.0, 0.0, math.inf)),
        ({"flow": "", "high": "95"}, (0.0, 95.0, 95.0, math.inf)),
        ({"flow": "0"}, (0.0, 0.0, 0.0, math.inf)),
        ({"flags": "daily_mean"}, (108.0, math.inf, 0.0, math.inf)),
        ({"flow": "", "low": "80", "high": "95", "flags": "daily_mean"}, (80.0, math.inf, 0.0, math.inf)),
        ({"flow": "", "low": "0"}, None),
    ],
    ids=["at least", "between", "at most", "zero", "flagged", "between and flagged", "says nothing"],
)
def test_bounds_become_intervals(
    cells: dict[str, str], expected: Any, small_study: Any, tmp_path: Path
) -> None:
    for name, value in cells.items():
        small_study.put(P, 3, name, value)
    assert expected == known(read(small_study, tmp_path), "00101", 1992)


def test_flags_follow_the_configuration(small_study: Any, tmp_path: Path) -> None:
    small_study.put(P, 3, "flags", "estimated")
    small_study.study += "flags: {estimated: below}\n"
    assert (0.0, 108.0, 108.0, math.inf) == known(read(small_study, tmp_path), "00101", 1992)


def test_units_are_converted_at_the_door(small_study: Any, tmp_path: Path) -> None:
    small_study.set_key("units: {flow: m3/s, area: km2}", "units: {flow: ft3/s, area: mi2}")
    study = read(small_study, tmp_path)
    # International foot: 0.3048 m; statute mile: 1.609344 km; both exact by definition (1959).
    assert known(study, "00101", 1992) == pytest.approx(
        (108 * 0.028316846592,) * 2 + (0.0, math.inf), rel=1e-14
    )
    assert 100 * 2.589988110336 == pytest.approx(study.gauges["area_km2"][0], rel=1e-14)


@pytest.mark.parametrize(
    ("starts", "date"), [(7, "1991-07-01"), (1, "1992-12-31"), (10, "1992-09-30"), (10, "1991")]
)
def test_water_years_are_named_by_their_end(starts: int, date: str, small_study: Any, tmp_path: Path) -> None:
    for row in range(2, 75):
        small_study.put(P, row, "date", "")
    small_study.put(P, 3, "date", date)
    small_study.set_key("starts: 10", f"starts: {starts}")
    assert () == read(small_study, tmp_path).warnings


def test_nothing_depends_on_the_order_of_rows(small_study: Any, tmp_path: Path) -> None:
    decide(small_study, subject="peak", action="set_flow", gauge_id="00101", water_year="1994", value="81")
    decide(small_study, subject="region", action="move", gauge_id="00102", value="north")
    small_study.add("thresholds.csv", gauge_id="00101", first_year="1930", last_year="1939", low="450")
    (tmp_path / "a").mkdir()
    (tmp_path / "b").mkdir()
    first = read(small_study, tmp_path / "a")
    for name, table in small_study.tables.items():
        head, *rows = table
        random.Random(3).shuffle(rows)
        small_study.tables[name] = [head, *rows]
    second = read(small_study, tmp_path / "b")
    for name in (
        "water_year",
        "flow_low",
        "flow_high",
        "perception_low",
        "perception_high",
        "observed",
        "cause",
    ):
        np.testing.assert_array_equal(getattr(first.records, name), getattr(second.records, name))
    for name in ("gauges", "targets", "periods", "redundancy", "ledger"):
        assert getattr(first, name).equals(getattr(second, name))
