"""Checks of the peaks table, row by row and between rows."""

from __future__ import annotations

import calendar
import re
from dataclasses import dataclass

import numpy as np
import pandas as pd

from wrackline.study.cells import (
    BoolArray,
    FloatArray,
    blank,
    each_word,
    non_negative,
    one_of,
    references,
    report,
    years,
)
from wrackline.study.config import FLAG_NAMES
from wrackline.study.csv_files import IntArray, Sheet, TextArray
from wrackline.study.faults import FaultLog
from wrackline.study.spans import year_key
from wrackline.study.vocabulary import CAUSES, KINDS, did_you_mean

_DATE = re.compile(r"(\d{4})(?:-(\d{2})(?:-(\d{2}))?)?")


@dataclass(frozen=True)
class Peaks:
    """The faultless rows of the peaks table, in the file's order; shape (n,), flows in m3/s.

    ``low`` and ``high`` are equal where the flow is known exactly. ``every_key`` holds the gauge and
    year of all rows that name one, faultless otherwise or not, so that a line of the ledger that
    points at a bad row is not reported as pointing at nothing.
    """

    file: str
    rows_read: int
    row: IntArray
    gauge: IntArray
    water_year: IntArray
    low: FloatArray
    high: FloatArray
    historic: BoolArray
    cause: TextArray
    flags: TextArray
    every_key: IntArray

    @property
    def key(self) -> IntArray:
        return year_key(self.gauge, self.water_year)


def read_peaks(
    sheet: Sheet, gauge_ids: list[str] | None, flow_in_m3s: float, water_year_starts: int, log: FaultLog
) -> Peaks:
    """Check the peaks table and return its faultless rows."""
    gauge, gauge_good = references(sheet, "gauge_id", gauge_ids, log)
    year, year_good = years(sheet, "water_year", log)
    low, high, flow_good = _flows(sheet, log)
    _check_dates(sheet, year, year_good, water_year_starts, log)
    kind, kind_good = one_of(sheet, "kind", KINDS, log, "unknown_kind", default="systematic")
    cause, cause_good = one_of(sheet, "cause", CAUSES, log, "unknown_cause", default="unknown")
    _check_flags(sheet, log)
    placed = gauge_good & year_good & (gauge >= 0)
    good = placed & flow_good & kind_good & cause_good & ~_repeated_years(sheet, gauge, year, placed, log)
    return Peaks(
        file=sheet.file,
        rows_read=len(sheet),
        row=sheet.rows[good],
        gauge=gauge[good],
        water_year=year[good],
        low=low[good] * flow_in_m3s,
        high=high[good] * flow_in_m3s,
        historic=np.asarray(kind[good] == "historic", dtype=bool),
        cause=cause[good],
        flags=sheet.text("flags")[good],
        every_key=np.unique(year_key(gauge[placed], year[placed])),
    )


def _flows(sheet: Sheet, log: FaultLog) -> tuple[FloatArray, FloatArray, BoolArray]:
    """Return the interval of every row in the file's unit, and which rows are faultless."""
    flow, flow_good = non_negative(sheet, "flow", log)
    low, low_good = non_negative(sheet, "low", log)
    high, high_good = non_negative(sheet, "high", log)
    has_flow, has_low, has_high = (~blank(sheet.text(name)) for name in ("flow", "low", "high"))
    both = has_flow & (has_low | has_high)
    report(
        log,
        sheet,
        both,
        "flow",
        "flow_and_bounds",
        "A row has a flow or bounds, not both.",
        "Blank `flow` where only bounds are known, else blank `low` and `high`.",
    )
    neither = ~has_flow & ~has_low & ~has_high
    report(
        log,
        sheet,
        neither,
        "flow",
        "no_flow",
        "The row has neither a flow nor bounds.",
        "Give `flow`, or `low` and `high`; take the row out where nothing is known.",
    )
    upside_down = low_good & high_good & (low > high)
    report(log, sheet, upside_down, "low", "interval_upside_down", "`low` is above `high`.", "Swap them.")
    good = flow_good & low_good & high_good & ~both & ~neither & ~upside_down
    low = np.where(has_flow, flow, np.where(has_low, low, 0.0))
    high = np.where(has_flow, flow, np.where(has_high, high, np.inf))
    return low, high, good


def _repeated_years(
    sheet: Sheet, gauge: IntArray, year: IntArray, placed: BoolArray, log: FaultLog
) -> BoolArray:
    key = np.where(placed, year_key(gauge, year), -1 - np.arange(len(year)))
    repeated = pd.Series(key).duplicated().to_numpy()
    if repeated.any():
        first = dict(zip(key[::-1].tolist(), sheet.rows[::-1].tolist(), strict=True))
        for at in np.flatnonzero(repeated):
            log.problem(
                "duplicate_gauge_year",
                sheet.file,
                f"Gauge {sheet.text('gauge_id')[at]} has this water year in row {first[int(key[at])]} already.",
                "Keep the larger of two floods, or the better of two entries.",
                row=sheet.rows[at],
                column="water_year",
                value=sheet.text("water_year")[at],
            )
    return np.asarray(repeated, dtype=bool)


def water_years_of(date: str, starts: int) -> tuple[int, int] | None:
    """Return the first and last water year in which a whole or partial date may lie; None: no date.

    Examples
    --------
    >>> water_years_of("1936-10-02", 10), water_years_of("1936", 10), water_years_of("1936-02-30", 10)
    ((1937, 1937), (1936, 1937), None)
    """
    match = _DATE.fullmatch(date)
    if match is None:
        return None
    year, month, day = (int(part) if part else None for part in match.groups())
    if year is None or year == 0 or (month is not None and not 1 <= month <= 12):
        return None
    if month is None:
        return year, year if starts == 1 else year + 1
    if day is not None and not 1 <= day <= calendar.monthrange(year, month)[1]:
        return None
    water_year = year + 1 if starts > 1 and month >= starts else year
    return water_year, water_year


def _check_dates(sheet: Sheet, year: IntArray, year_good: BoolArray, starts: int, log: FaultLog) -> None:
    if "date" not in sheet:
        return
    text = sheet.text("date")
    given = ~blank(text)
    span = each_word(text, lambda word: water_years_of(word, starts) or (0, 0))
    first, last = (np.array([pair[end] for pair in span], dtype=np.int64) for end in (0, 1))
    malformed = given & (first == 0)
    report(log, sheet, malformed, "date", "malformed_date", "This is not a date.", _about_date)
    outside = given & ~malformed & year_good & ((year < first) | (year > last))
    for at in np.flatnonzero(outside):
        expected = str(first[at]) if first[at] == last[at] else f"{first[at]} or {last[at]}"
        log.problem(
            "date_outside_water_year",
            sheet.file,
            f"The date lies in water year {expected}, the row says {year[at]}.",
            f"Correct one of them; the study's water year starts in {calendar.month_name[starts]}"
            + (" and is named by the year in which it ends." if starts > 1 else "."),
            row=sheet.rows[at],
            column="date",
            value=text[at],
        )


def _about_date(word: str) -> str:
    without_zeros = re.fullmatch(
        r"(\d{4})(-\d{2})?-00", word.removesuffix("-00") + "-00" if "-00" in word else ""
    )
    if without_zeros and word.startswith(without_zeros[1]):
        known = without_zeros[1] + (without_zeros[2] if without_zeros[2] not in (None, "-00") else "")
        return f"Write '{known}' for what is known of it."
    return "Write it as 1936-03-18, or in part as 1936-03 or 1936."


def _check_flags(sheet: Sheet, log: FaultLog) -> None:
    if "flags" not in sheet:
        return
    text = sheet.text("flags")
    bad = each_word(text, lambda word: not set(word.split()) <= set(FLAG_NAMES), bool)
    for at in np.flatnonzero(bad):
        for flag in text[at].split():
            if flag not in FLAG_NAMES:
                apart = " Flags are separated by spaces." if re.search(r"[,;/|]", flag) else ""
                log.problem(
                    "unknown_flag",
                    sheet.file,
                    "There is no such flag.",
                    did_you_mean(flag, FLAG_NAMES) + apart,
                    row=sheet.rows[at],
                    column="flags",
                    value=flag,
                )
