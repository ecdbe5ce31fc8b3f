"""Spans of years at gauges: perception thresholds and periods, and what holds in a given year."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from wrackline.study.cells import (
    BoolArray,
    FloatArray,
    booleans,
    non_negative,
    one_of,
    references,
    report,
    years,
)
from wrackline.study.csv_files import IntArray, Sheet, TextArray
from wrackline.study.faults import FaultLog
from wrackline.study.vocabulary import STATES

YEAR_STEP = 10_000


def year_key(gauge: IntArray, water_year: IntArray) -> IntArray:
    """Return one number for a gauge and a water year, ordered by gauge and then year."""
    return gauge * YEAR_STEP + water_year


def find_keys(sorted_keys: IntArray, wanted: IntArray) -> IntArray:
    """Return where every wanted key stands among the sorted keys; -1 where it does not."""
    if len(sorted_keys) == 0:
        return np.full(len(wanted), -1, dtype=np.int64)
    at = np.minimum(np.searchsorted(sorted_keys, wanted), len(sorted_keys) - 1)
    return np.where(sorted_keys[at] == wanted, at, -1)


@dataclass(frozen=True)
class Spans:
    """Spans of water years that do not overlap within a gauge, sorted by gauge and first year; shape (k,)."""

    row: IntArray
    gauge: IntArray
    first_year: IntArray
    last_year: IntArray

    def every_year(self) -> tuple[IntArray, IntArray]:
        """Return the sorted key of every year of every span, and the number of its span."""
        counts = self.last_year - self.first_year + 1
        span = np.repeat(np.arange(len(counts)), counts)
        starts = np.cumsum(counts) - counts
        year = self.first_year[span] + np.arange(len(span)) - starts[span]
        return year_key(self.gauge[span], year), span


@dataclass(frozen=True)
class Thresholds(Spans):
    """Perception thresholds by span, m3/s."""

    low: FloatArray
    high: FloatArray


@dataclass(frozen=True)
class Periods(Spans):
    """States of the basin by span, and whether its years are used."""

    state: TextArray
    use: BoolArray
    why: TextArray


def no_thresholds() -> Thresholds:
    none, no_flow = np.empty(0, dtype=np.int64), np.empty(0)
    return Thresholds(none, none, none, none, no_flow, no_flow)


def no_periods() -> Periods:
    none, no_text = np.empty(0, dtype=np.int64), np.empty(0, dtype=object)
    return Periods(none, none, none, none, no_text, np.empty(0, dtype=bool), no_text)


def read_thresholds(
    sheet: Sheet, gauge_ids: list[str] | None, flow_in_m3s: float, log: FaultLog
) -> Thresholds:
    """Check the thresholds table and return its faultless rows."""
    gauge, first, last, good = _read_spans(sheet, gauge_ids, log)
    low, low_good = non_negative(sheet, "low", log)
    blank_low = low_good & np.isnan(low)
    report(
        log,
        sheet,
        blank_low,
        "low",
        "blank",
        "A flow is required here.",
        "Write 0 where every flood was recorded.",
    )
    high, high_good = non_negative(sheet, "high", log)
    upside_down = low_good & high_good & (high <= low)
    report(
        log,
        sheet,
        upside_down,
        "high",
        "threshold_upside_down",
        "The threshold's `high` is not above its `low`.",
        "Swap them, or leave `high` blank.",
    )
    good &= low_good & high_good & ~blank_low & ~upside_down
    order = _without_overlaps(sheet, gauge, first, last, good, "overlapping_thresholds", log)
    high = np.where(np.isnan(high), np.inf, high)
    return Thresholds(
        sheet.rows[order],
        gauge[order],
        first[order],
        last[order],
        low[order] * flow_in_m3s,
        high[order] * flow_in_m3s,
    )


def read_periods(sheet: Sheet, gauge_ids: list[str] | None, log: FaultLog) -> Periods:
    """Check the periods table and return its faultless rows."""
    gauge, first, last, good = _read_spans(sheet, gauge_ids, log)
    state, state_good = one_of(sheet, "state", STATES, log, "unknown_state", default=None)
    use, use_good = booleans(sheet, "use", log, default=None)
    why = sheet.text("why")
    report(log, sheet, why == "", "why", "missing_reason", "A period needs its reason.", "Say why.")
    good &= state_good & use_good
    order = _without_overlaps(sheet, gauge, first, last, good, "overlapping_periods", log)
    return Periods(
        sheet.rows[order], gauge[order], first[order], last[order], state[order], use[order], why[order]
    )


def _read_spans(
    sheet: Sheet, gauge_ids: list[str] | None, log: FaultLog
) -> tuple[IntArray, IntArray, IntArray, BoolArray]:
    gauge, gauge_good = references(sheet, "gauge_id", gauge_ids, log)
    first, first_good = years(sheet, "first_year", log)
    last, last_good = years(sheet, "last_year", log)
    both = first_good & last_good
    upside_down = both & (last < first)
    report(
        log,
        sheet,
        upside_down,
        "last_year",
        "span_upside_down",
        "The span ends before it begins.",
        "Swap first_year and last_year.",
    )
    return gauge, first, last, gauge_good & both & ~upside_down & (gauge >= 0)


def _without_overlaps(
    sheet: Sheet, gauge: IntArray, first: IntArray, last: IntArray, good: BoolArray, code: str, log: FaultLog
) -> IntArray:
    """Return the good rows in order of gauge and year; report each that begins inside an earlier one."""
    order = np.flatnonzero(good)
    order = order[np.lexsort((last[order], first[order], gauge[order]))]
    stands = np.ones(len(order), dtype=bool)
    earlier = -1
    for at, row in enumerate(order):
        if earlier >= 0 and gauge[earlier] == gauge[row] and first[row] <= last[earlier]:
            stands[at] = False
            log.problem(
                code,
                sheet.file,
                f"The span overlaps that of row {sheet.rows[earlier]} ({first[earlier]} to {last[earlier]}).",
                "Let every year of a gauge stand in one span.",
                row=sheet.rows[row],
                column="first_year",
                value=sheet.text("first_year")[row],
            )
        else:
            earlier = int(row)
    return order[stands]
