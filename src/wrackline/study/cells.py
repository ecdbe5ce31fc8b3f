"""Checks of one column of an input table: every bad cell is reported, good cells come back as values."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable, Sequence
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from wrackline.study.csv_files import IntArray, Sheet, TextArray
from wrackline.study.faults import FaultLog
from wrackline.study.vocabulary import (
    BOOLEANS,
    EARLIEST_YEAR,
    LARGEST_AREA,
    LARGEST_FLOW,
    LATEST_YEAR,
    did_you_mean,
    nearest_word,
)

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

_DECIMAL_COMMA = re.compile(r"[+-]?\d{1,3}(\.\d{3})*,\d+|[+-]?\d+,\d+")


def blank(values: TextArray) -> BoolArray:
    return np.asarray(values == "", dtype=bool)


def report(
    log: FaultLog,
    sheet: Sheet,
    bad: BoolArray,
    column: str,
    code: str,
    problem: str,
    mend: str | Callable[[str], str] = "",
    *,
    warn: bool = False,
) -> None:
    """Report every row marked bad, with the text that stands in the column."""
    tell = log.warning if warn else log.problem
    text = sheet.text(column)
    for at in np.flatnonzero(bad):
        value = text[at]
        tell(
            code,
            sheet.file,
            problem,
            mend(value) if callable(mend) else mend,
            row=sheet.rows[at],
            column=column,
            value=value or None,
        )


def each_word(values: TextArray, function: Callable[[str], Any], dtype: Any = object) -> NDArray[Any]:
    """Apply a function to a text column, once for each distinct text."""
    codes, words = pd.factorize(values)
    results = np.empty(len(words), dtype=dtype)
    results[:] = [function(word) for word in words]
    return results[codes] if len(words) else np.empty(len(values), dtype=dtype)


def numbers(
    sheet: Sheet, column: str, log: FaultLog, *, required: bool = False
) -> tuple[FloatArray, BoolArray]:
    """Return a column's numbers (blank: NaN) and which cells are faultless, shape (n,) each."""
    text = sheet.text(column)
    empty = blank(text)
    values = np.asarray(pd.to_numeric(text, errors="coerce"), dtype=float)
    comma = np.zeros(len(text), dtype=bool)
    unread = np.isnan(values) & ~empty
    comma[unread] = [bool(_DECIMAL_COMMA.fullmatch(word)) for word in text[unread]]
    report(
        log,
        sheet,
        comma,
        column,
        "decimal_comma",
        "The number has a comma.",
        lambda v: f"Write {_with_point(v)}.",
    )
    report(log, sheet, unread & ~comma, column, "not_a_number", "A number is expected.", _about_number)
    infinite = np.isinf(values)
    report(
        log,
        sheet,
        infinite,
        column,
        "infinite",
        "A finite number is expected.",
        "Leave an unbounded end blank.",
    )
    bad = unread | infinite
    if required:
        report(log, sheet, empty, column, "blank", "A number is required here.", "Fill it in.")
        bad |= empty
    return np.where(bad, np.nan, values), ~bad


def _with_point(word: str) -> str:
    return word.replace(".", "").replace(",", ".")


def _about_number(word: str) -> str:
    if word[:1] in "<>":
        return "A bound goes into `low` or `high`, with `flow` blank."
    return (
        "Leave it blank where the number is not known."
        if word.lower() in ("na", "nan", "none", "null", "-")
        else ""
    )


def non_negative(sheet: Sheet, column: str, log: FaultLog) -> tuple[FloatArray, BoolArray]:
    """Return flows: not below zero, not above any on Earth, blank allowed (NaN)."""
    values, good = numbers(sheet, column, log)
    negative = good & (values < 0)
    report(
        log,
        sheet,
        negative,
        column,
        "negative",
        "The number cannot be negative.",
        "Leave it blank where it is not known; some databases write -999 for that.",
    )
    absurd = good & (values > LARGEST_FLOW)
    report(
        log,
        sheet,
        absurd,
        column,
        "absurd_flow",
        f"No flow on Earth is above {LARGEST_FLOW:g}.",
        "Correct it; leave an unbounded end blank.",
    )
    bad = negative | absurd
    return np.where(bad, np.nan, values), good & ~bad


def positive(sheet: Sheet, column: str, log: FaultLog, *, required: bool) -> tuple[FloatArray, BoolArray]:
    """Return areas: above zero, not above any on Earth."""
    values, good = numbers(sheet, column, log, required=required)
    low = good & (values <= 0)
    report(log, sheet, low, column, "not_positive", "The number must be above zero.", "Correct it.")
    absurd = good & (values > LARGEST_AREA)
    report(
        log,
        sheet,
        absurd,
        column,
        "absurd_area",
        f"No basin on Earth is above {LARGEST_AREA:g}.",
        "Correct it, or the unit that the study declares.",
    )
    bad = low | absurd
    return np.where(bad, np.nan, values), good & ~bad


def years(sheet: Sheet, column: str, log: FaultLog, *, required: bool = True) -> tuple[IntArray, BoolArray]:
    """Return water years (0 where blank or bad) and which cells are faultless."""
    values, good = numbers(sheet, column, log, required=required)
    whole = good & (np.floor(values) == values)
    report(
        log,
        sheet,
        good & ~whole & ~np.isnan(values),
        column,
        "not_a_year",
        "A whole year is expected.",
        "Correct it.",
    )
    absurd = whole & ((values < EARLIEST_YEAR) | (values > LATEST_YEAR))
    report(
        log,
        sheet,
        absurd,
        column,
        "absurd_year",
        f"The year lies outside {EARLIEST_YEAR} to {LATEST_YEAR}.",
        "Write the calendar year in which the water year ends, in four digits.",
    )
    fine = whole & ~absurd
    return np.where(fine, np.nan_to_num(values), 0).astype(np.int64), fine | (good & np.isnan(values))


def one_of(
    sheet: Sheet, column: str, valid: Sequence[str], log: FaultLog, code: str, *, default: str | None
) -> tuple[TextArray, BoolArray]:
    """Return words of a closed list; blank gives the default, or is a fault where there is none."""
    text = sheet.text(column)
    empty = blank(text)
    known = each_word(text, lambda word: word in valid, bool)
    report(
        log,
        sheet,
        ~known & ~empty,
        column,
        code,
        "The word is not known here.",
        lambda word: did_you_mean(word, valid),
    )
    if default is None:
        report(
            log, sheet, empty, column, "blank", "A word is required here.", f"Valid are: {', '.join(valid)}."
        )
        return text, known
    return np.where(empty, default, text), known | empty


def booleans(
    sheet: Sheet, column: str, log: FaultLog, *, default: bool | None
) -> tuple[BoolArray, BoolArray]:
    """Return true/false (capitals accepted, as spreadsheets write them)."""
    text = sheet.text(column)
    empty = blank(text)
    lower = each_word(text, str.lower)
    known = each_word(lower, lambda word: word in BOOLEANS, bool)
    report(
        log, sheet, ~known & ~empty, column, "unknown_boolean", "true or false is expected.", _about_boolean
    )
    if default is None:
        report(log, sheet, empty, column, "blank", "true or false is required here.", "Fill it in.")
        return lower == "true", known
    return np.where(empty, default, lower == "true"), known | empty


def _about_boolean(word: str) -> str:
    meant = {
        "yes": "true",
        "y": "true",
        "1": "true",
        "t": "true",
        "no": "false",
        "n": "false",
        "0": "false",
        "f": "false",
    }
    return f"Write '{meant[word.lower()]}'." if word.lower() in meant else did_you_mean(word, BOOLEANS)


def identifiers(sheet: Sheet, column: str, log: FaultLog) -> BoolArray:
    """Check a column that names its rows: filled, of allowed characters, each once; return which rows stand."""
    text = sheet.text(column)
    empty = blank(text)
    report(log, sheet, empty, column, "blank", "An identifier is required here.", "Fill it in.")
    allowed = each_word(text, lambda word: all(c.isalnum() or c in "-_." for c in word), bool)
    report(
        log,
        sheet,
        ~allowed,
        column,
        "bad_identifier",
        "An identifier holds letters, digits, '-', '_' and '.' only.",
        lambda word: f"Write it as '{re.sub('[^-_.0-9a-zA-Z]+', '_', word)}' in all files.",
    )
    doubled = pd.Series(text).duplicated().to_numpy() & ~empty
    first = (
        dict(zip(reversed(text.tolist()), reversed(sheet.rows.tolist()), strict=True))
        if doubled.any()
        else {}
    )
    report(
        log,
        sheet,
        doubled,
        column,
        "duplicate_id",
        "The identifier stands twice.",
        lambda word: f"It is also in row {first[word]}. Keep one.",
    )
    return ~empty & allowed & ~doubled


def references(
    sheet: Sheet,
    column: str,
    known: Sequence[str] | None,
    log: FaultLog,
    code: str = "unknown_gauge",
    *,
    required: bool = True,
    partner_file: str = "gauges.csv",
) -> tuple[IntArray, BoolArray]:
    """Return the number of the site that every cell names (-1: none), and which cells are faultless.

    An identifier that would fit with leading zeros added or taken off gets its own fault, since
    spreadsheets drop them. With ``known`` None nothing is compared.
    """
    text = sheet.text(column)
    empty = blank(text)
    if required:
        report(log, sheet, empty, column, "blank", "An identifier is required here.", "Fill it in.")
    if known is None:
        return np.full(len(text), -1), ~empty if required else np.ones(len(text), dtype=bool)
    number_of = {name: number for number, name in enumerate(known)}
    number = each_word(text, lambda word: number_of.get(word, -1), np.int64)
    unknown = (number < 0) & ~empty
    bare = _without_zeros(known) if unknown.any() else {}
    partner = each_word(text, lambda word: bare.get(_bare(word), ""))
    lost = unknown & (partner != "")
    report(
        log,
        sheet,
        lost,
        column,
        "lost_leading_zeros",
        "No such site is known; leading zeros seem to be lost or added.",
        lambda word: (
            f"Is it '{bare[_bare(word)]}' of {partner_file}? Format the column as text before saving."
        ),
    )
    report(
        log,
        sheet,
        unknown & ~lost,
        column,
        code,
        f"No such site is in {partner_file}.",
        lambda word: _nearest_site(word, known),
    )
    return number, (number >= 0) | (empty & (not required))


def _bare(word: str) -> str:
    return word.removesuffix(".0").lstrip("0") if word.removesuffix(".0").isdigit() else ""


def _without_zeros(known: Iterable[str]) -> dict[str, str]:
    return {_bare(name): name for name in known if _bare(name)}


def _nearest_site(word: str, known: Sequence[str]) -> str:
    near = nearest_word(word, known) if len(known) <= 5000 else None
    return f"Did you mean '{near}'?" if near else "Add the site, or take the row out."
