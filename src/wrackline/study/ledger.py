"""The analyst's ledger and the decisions on nested pairs: checked, so that every line points at something."""

from __future__ import annotations

import re
from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from wrackline.study.cells import BoolArray, FloatArray, each_word, one_of, references, report, years
from wrackline.study.csv_files import IntArray, Sheet
from wrackline.study.faults import FaultLog
from wrackline.study.peaks import water_years_of
from wrackline.study.spans import find_keys, year_key
from wrackline.study.vocabulary import (
    LARGEST_FLOW,
    LEDGER,
    LEDGER_ACTIONS,
    REDUNDANCY,
    SUBJECTS,
    did_you_mean,
    nearest_word,
)

LEDGER_COLUMNS = LEDGER.names
FLOW_ACTIONS = ("set_flow", "set_interval", "set", "low_flood_threshold")
"""Actions whose value is a flow, or two."""


@dataclass(frozen=True)
class Ledger:
    """Lines of the ledger that can be applied, in order of date; shape (k,).

    ``frame`` holds the file's columns as text. ``low`` and ``high`` are the flows that a line sets,
    m3/s (NaN: none). ``superseded_by`` is the row of the later line on the same thing (0: none).
    """

    frame: pd.DataFrame
    row: IntArray
    gauge: IntArray
    water_year: IntArray
    low: FloatArray
    high: FloatArray
    superseded_by: IntArray

    def lines(self, subject: str) -> list[int]:
        """Return the numbers of the lines on a subject that no later line supersedes."""
        chosen = (self.frame["subject"] == subject).to_numpy() & (self.superseded_by == 0)
        return [int(line) for line in np.flatnonzero(chosen)]


def empty_ledger() -> Ledger:
    none = np.empty(0, dtype=np.int64)
    frame = pd.DataFrame({name: np.empty(0, dtype=object) for name in LEDGER_COLUMNS})
    return Ledger(frame, none, none, none, np.empty(0), np.empty(0), none)


@dataclass
class Standing:
    """What a ledger can point at: keys of peaks and of threshold years, names of gauges and regions."""

    gauge_ids: list[str] | None = None
    peak_keys: IntArray | None = None
    threshold_keys: IntArray | None = None
    regions: set[str] = field(default_factory=set)


def read_ledger(sheet: Sheet, standing: Standing, flow_in_m3s: float, log: FaultLog) -> Ledger:
    """Check the ledger and return the lines that can be applied."""
    dates = each_word(sheet.text("date"), lambda d: len(d) == 10 and water_years_of(d, 1) is not None, bool)
    report(
        log,
        sheet,
        ~dates,
        "date",
        "malformed_date",
        "The day of the decision is expected.",
        "Write it as 2025-11-03.",
    )
    for column, code, problem in (
        ("by", "missing_author", "A decision needs a name."),
        ("why", "missing_reason", "A decision needs its reason."),
    ):
        report(log, sheet, sheet.text(column) == "", column, code, problem, "Fill it in.")
    _, subject_good = one_of(sheet, "subject", SUBJECTS, log, "unknown_subject", default=None)
    action_good = _check_actions(sheet, subject_good, log)
    gauge, gauge_good = references(sheet, "gauge_id", standing.gauge_ids, log, required=False)
    year, year_good = years(sheet, "water_year", log, required=False)
    low, high, value_good = _values(sheet, action_good, log)
    checked = subject_good & action_good & gauge_good & year_good & value_good
    good = checked & _points_at_something(sheet, checked, gauge, year, standing, log)
    order = np.flatnonzero(good & dates)
    order = order[np.lexsort((_line_text(sheet)[order], sheet.text("date")[order].astype(str)))]
    frame = pd.DataFrame({name: sheet.text(name)[order] for name in LEDGER_COLUMNS})
    return Ledger(
        frame,
        sheet.rows[order],
        gauge[order],
        year[order],
        low[order] * flow_in_m3s,
        high[order] * flow_in_m3s,
        _superseded(sheet, order, log),
    )


def _line_text(sheet: Sheet) -> np.ndarray:
    return np.array(
        ["\x1f".join(line) for line in zip(*(sheet.text(n) for n in LEDGER_COLUMNS), strict=True)], dtype=str
    )


def _check_actions(sheet: Sheet, subject_good: BoolArray, log: FaultLog) -> BoolArray:
    good = np.ones(len(sheet), dtype=bool)
    for at, (subject, action) in enumerate(zip(sheet.text("subject"), sheet.text("action"), strict=True)):
        valid = LEDGER_ACTIONS.get(subject, ())
        if action == "" or (subject_good[at] and valid and action not in valid):
            good[at] = False
            log.problem(
                "unknown_action",
                sheet.file,
                f"The subject '{subject}' has no such action." if action else "A line needs its action.",
                did_you_mean(action, valid) if valid else "Say what is done.",
                row=sheet.rows[at],
                column="action",
                value=action or None,
            )
    return good


def _values(sheet: Sheet, action_good: BoolArray, log: FaultLog) -> tuple[FloatArray, FloatArray, BoolArray]:
    low, high = np.full(len(sheet), np.nan), np.full(len(sheet), np.nan)
    good = np.ones(len(sheet), dtype=bool)
    for at, (action, value) in enumerate(zip(sheet.text("action"), sheet.text("value"), strict=True)):
        if not action_good[at] or action not in FLOW_ACTIONS:
            continue
        bounds = flow_bounds(value) if action == "set_interval" else flow_bounds(f"{value}..{value}")
        if bounds is None or bounds[0] > bounds[1] or (action != "set_interval" and not value):
            good[at] = False
            expected = (
                "An interval low..high is expected." if action == "set_interval" else "A flow is expected."
            )
            mend = (
                "Write 120..300, ..300 (at most) or 120.. (at least)."
                if action == "set_interval"
                else "Write 120."
            )
            log.problem(
                "bad_value",
                sheet.file,
                expected,
                mend,
                row=sheet.rows[at],
                column="value",
                value=value or None,
            )
        else:
            low[at], high[at] = bounds
    return low, high, good


def flow_bounds(text: str) -> tuple[float, float] | None:
    """Read ``low..high``; a blank low is 0, a blank high unbounded; None where it is not that, or no flow on Earth.

    Examples
    --------
    >>> flow_bounds("120..300"), flow_bounds("120.5.."), flow_bounds("-3..4")
    ((120.0, 300.0), (120.5, inf), None)
    """
    number = r"\d+(?:\.\d+)?"
    match = re.fullmatch(rf"({number})?\s*\.\.\s*({number})?", text.strip())
    if match is None or match.groups() == (None, None):
        return None
    if any(float(given) > LARGEST_FLOW for given in match.groups() if given):
        return None
    return float(match[1] or 0), float(match[2] or "inf")


def _points_at_something(
    sheet: Sheet, checked: BoolArray, gauge: IntArray, year: IntArray, standing: Standing, log: FaultLog
) -> BoolArray:
    good = np.ones(len(sheet), dtype=bool)
    subject, key = sheet.text("subject"), year_key(gauge, year)
    for at in np.flatnonzero(checked):
        if subject[at] in ("model", "estimate"):
            continue
        lack = ""
        if sheet.text("gauge_id")[at] == "":
            lack = "The line names no gauge."
        elif subject[at] == "peak" and year[at] == 0:
            lack = "The line names no water year."
        elif subject[at] == "peak" and not _stands(standing.peak_keys, key[at]):
            lack = f"Gauge {sheet.text('gauge_id')[at]} has no peak in water year {year[at]}."
        elif subject[at] == "threshold" and not _threshold_stands(gauge[at], year[at], standing):
            lack = f"Gauge {sheet.text('gauge_id')[at]} has no threshold or peak there."
        if lack:
            good[at] = False
            log.problem(
                "points_at_nothing",
                sheet.file,
                lack,
                "Correct gauge_id and water_year, or take the line out.",
                row=sheet.rows[at],
                column="water_year" if "year" in lack else "gauge_id",
                value=sheet.text("water_year" if "year" in lack else "gauge_id")[at] or None,
            )
        elif subject[at] in ("pool", "region"):
            _warn_of_new_region(sheet, int(at), standing.regions, log)
    return good


def _stands(keys: IntArray | None, key: int) -> bool:
    return keys is None or bool(find_keys(keys, np.array([key]))[0] >= 0)


def _threshold_stands(gauge: int, year: int, standing: Standing) -> bool:
    if year:
        key = int(year_key(np.int64(gauge), np.int64(year)))  # type: ignore[arg-type]
        return _stands(standing.threshold_keys, key) or _stands(standing.peak_keys, key)
    keys = standing.threshold_keys
    first, end = (year_key(np.int64(g), np.int64(0)) for g in (gauge, gauge + 1))  # type: ignore[arg-type]
    return keys is None or bool(((keys >= first) & (keys < end)).any())


def _warn_of_new_region(sheet: Sheet, at: int, regions: set[str], log: FaultLog) -> None:
    value = sheet.text("value")[at]
    if value and regions and value not in regions:
        near = nearest_word(value, sorted(regions))
        log.warning(
            "new_region",
            sheet.file,
            "No site has this region so far: the line makes a new one.",
            f"Did you mean '{near}'?" if near else "",
            row=sheet.rows[at],
            column="value",
            value=value,
        )


def _superseded(sheet: Sheet, order: IntArray, log: FaultLog) -> IntArray:
    """Return for every line the row of a later one on the same thing; same day is a contradiction."""
    out = np.zeros(len(order), dtype=np.int64)
    latest: dict[tuple[str, ...], int] = {}
    for at, line in enumerate(order):
        subject = sheet.text("subject")[line]
        if subject in ("model", "estimate"):
            continue
        about = "region" if subject == "pool" else subject
        if sheet.text("action")[line] == "low_flood_threshold":
            about = "low floods"
        thing = (about, sheet.text("gauge_id")[line], sheet.text("water_year")[line])
        if thing in latest:
            earlier = latest[thing]
            if sheet.text("date")[order[earlier]] == sheet.text("date")[line]:
                rows = sorted((int(sheet.rows[order[earlier]]), int(sheet.rows[line])))
                log.problem(
                    "contradiction",
                    sheet.file,
                    f"Row {rows[0]} decides on the same thing on the same day.",
                    "Keep one line, or give the later decision its own date.",
                    row=rows[1],
                    column="subject",
                    value=subject,
                )
            out[earlier] = sheet.rows[line]
        latest[thing] = at
    return out


def read_redundancy(sheet: Sheet, gauge_ids: list[str] | None, log: FaultLog) -> pd.DataFrame:
    """Check the decisions on nested pairs; return them with the lesser identifier first, sorted."""
    _, one_good = references(sheet, "gauge_id", gauge_ids, log)
    _, other_good = references(sheet, "other_id", gauge_ids, log)
    text = {name: sheet.text(name) for name in REDUNDANCY.names}
    same = one_good & other_good & (text["gauge_id"] == text["other_id"])
    report(
        log, sheet, same, "other_id", "pair_with_itself", "A pair needs two gauges.", "Name the other gauge."
    )
    report(log, sheet, text["why"] == "", "why", "missing_reason", "A decision needs its reason.", "Say why.")
    seen: dict[frozenset[str], int] = {}
    for at in range(len(sheet)):
        pair = (text["gauge_id"][at], text["other_id"][at])
        row = int(sheet.rows[at])
        if text["keep"][at] not in (*pair, "both"):
            mend = did_you_mean(text["keep"][at], (*pair, "both"))
            problem = "One gauge of the pair, or 'both', is expected."
            log.problem(
                "unknown_keep",
                sheet.file,
                problem,
                mend,
                row=row,
                column="keep",
                value=text["keep"][at] or None,
            )
        if frozenset(pair) in seen and one_good[at] and other_good[at] and not same[at]:
            problem = f"The pair is decided in row {seen[frozenset(pair)]} already."
            log.problem(
                "duplicate_pair", sheet.file, problem, "Keep one.", row=row, column="other_id", value=pair[1]
            )
        seen.setdefault(frozenset(pair), row)
    frame = pd.DataFrame(text)
    turn = (frame["gauge_id"] > frame["other_id"]).to_numpy()
    frame.loc[turn, ["gauge_id", "other_id"]] = frame.loc[turn, ["other_id", "gauge_id"]].to_numpy()
    return frame.sort_values(["gauge_id", "other_id"], kind="stable").reset_index(drop=True)
