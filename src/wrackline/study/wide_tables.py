"""Plain wide tables of annual peaks: a column per gauge, a row per water year or date."""

from __future__ import annotations

import csv
import io
import re

from wrackline.study.faults import FaultLog
from wrackline.study.import_findings import Findings, FoundPeak, is_flow, is_identifier
from wrackline.study.peaks import water_years_of
from wrackline.study.retrieval_codes import Bound
from wrackline.study.vocabulary import EARLIEST_YEAR, LATEST_YEAR

_SEPARATORS = ("\t", ";", ",")
_WATER_YEAR_NAMES = frozenset(["wateryear", "wy", "hydrologicalyear", "hydrologicyear"])
_WHEN = re.compile(r"[0-9]{4}(-[0-9]{2}(-[0-9]{2})?)?")
_UNKNOWN = frozenset(["", "na", "n/a", "nan", "none", "null", "-", "--"])
_BOUNDS: dict[str, Bound] = {"<": "below", ">": "above"}


def looks_wide(lines: list[str]) -> bool:
    """Say whether the first column below the header holds years or dates, and other columns exist."""
    rows = _rows(lines)[:2]
    if len(rows) < 2 or len(rows[0][1]) < 2:
        return False
    return bool(_WHEN.fullmatch(rows[1][1][0]))


def read_wide(
    lines: list[str], file: str, water_year_starts: int, flow_unit: str | None, into: Findings, log: FaultLog
) -> None:
    """Read a wide table; every cell below a gauge's name becomes a finding, blank ones with their reason."""
    (head_row, header), *body = _rows(lines)
    gauges = _gauges(header, body, file, head_row, log)
    _tell_what_a_year_is(header[0], body, file, head_row, water_year_starts, log)
    if flow_unit is None:
        log.problem(
            "no_unit",
            file,
            "The table does not say in which unit its flows are.",
            "Give --flow-unit m3/s or --flow-unit ft3/s.",
        )
    else:
        into.units[file] = flow_unit
    for row, cells in body:
        if any(cells[len(header) :]):
            log.problem(
                "ragged_row",
                file,
                f"The row has {len(cells)} cells, the header {len(header)}.",
                "Write numbers without thousands separators, with a decimal point.",
                row=row,
            )
            continue
        when = _when(cells[0], file, row, header[0], water_year_starts, log)
        if when is None:
            continue
        for at, gauge_id in gauges.items():
            text = cells[at] if at < len(cells) else ""
            found = _cell(text, file, row, gauge_id, when, log)
            if found is not None:
                into.peaks.append(found)


def _rows(lines: list[str]) -> list[tuple[int, list[str]]]:
    """Return the rows that hold anything, with their line, cut at the separator that the first of them uses most."""
    first = next((text for text in lines if text.strip() and not text.startswith("#")), "")
    separator = max(_SEPARATORS, key=first.count)
    reader = csv.reader(io.StringIO("\n".join(lines)), delimiter=separator)
    rows = []
    try:
        for cells in reader:
            stripped = [cell.strip() for cell in cells]
            if any(stripped) and not stripped[0].startswith("#"):
                rows.append((reader.line_num, stripped))
    except csv.Error:
        return []
    return rows


def _gauges(
    header: list[str], body: list[tuple[int, list[str]]], file: str, row: int, log: FaultLog
) -> dict[int, str]:
    gauges: dict[int, str] = {}
    for at, name in enumerate(header[1:], start=1):
        if not name:
            if any(len(cells) > at and cells[at] for _, cells in body):
                log.problem(
                    "nameless_column",
                    file,
                    f"Column {at + 1} has no name.",
                    "Put the gauge's identifier there.",
                    row=row,
                )
        elif not is_identifier(name):
            mend = f"Write it as '{re.sub('[^-_.0-9a-zA-Z]+', '_', name).strip('-._')}'."
            log.problem(
                "bad_identifier",
                file,
                "The column's name is taken as the gauge's identifier, which holds letters, digits, '-', '_' and '.'.",
                mend,
                row=row,
                column=name,
            )
        elif name in gauges.values():
            log.problem(
                "duplicate_column", file, "The column stands twice.", "Keep one.", row=row, column=name
            )
        else:
            gauges[at] = name
    if not body or not gauges:
        log.problem("no_rows", file, "The file holds no rows of peaks.", "Export it again, or leave it out.")
    return gauges


def _tell_what_a_year_is(
    name: str, body: list[tuple[int, list[str]]], file: str, row: int, starts: int, log: FaultLog
) -> None:
    plain = re.sub("[^a-z]", "", name.lower())
    if starts != 1 and plain not in _WATER_YEAR_NAMES and any(len(cells[0]) == 4 for _, cells in body):
        log.warning(
            "year_taken_as_water_year",
            file,
            "Its years are taken as water years, named by the calendar year in which they end.",
            "Give --water-year-starts 1 where they are calendar years; name the column water_year where they are not.",
            row=row,
            column=name or None,
        )


def _when(text: str, file: str, row: int, column: str, starts: int, log: FaultLog) -> tuple[str, int] | None:
    """Return the date, blank where only a water year is given, and the water year."""
    date = text if len(text) > 4 else ""
    span = water_years_of(text, starts) if _WHEN.fullmatch(text) else None
    if span is None or not EARLIEST_YEAR <= span[0] <= LATEST_YEAR:
        log.problem(
            "malformed_date",
            file,
            "A water year or a date is expected.",
            "Write 1936, 1936-03 or 1936-03-18.",
            row=row,
            column=column or None,
            value=text,
        )
        return None
    return date, span[0]


def _cell(
    text: str, file: str, row: int, gauge_id: str, when: tuple[str, int], log: FaultLog
) -> FoundPeak | None:
    date, water_year = when
    if text.lower() in _UNKNOWN:
        reason = "blank" if not text else f"'{text}': not known"
        return FoundPeak(
            file, row, gauge_id, date=date, water_year=water_year, left_out=f"{reason}; no peak is given"
        )
    bound = _BOUNDS.get(text[0], "")
    value = text[1:].strip() if bound else text
    if is_flow(value):
        words = {"": "", "below": "'<': high", "above": "'>': low"}[bound]
        return FoundPeak(
            file, row, gauge_id, value=value, date=date, water_year=water_year, bound=bound, words=words
        )
    comma, negative = "," in value, value.startswith("-") and is_flow(value[1:])
    log.problem(
        "decimal_comma" if comma else "negative" if negative else "not_a_number",
        file,
        "The number has a comma."
        if comma
        else "The number cannot be negative."
        if negative
        else "A number is expected.",
        "Write a decimal point and no thousands separator."
        if comma
        else "Leave the cell blank where the peak is not known; '<' and '>' before a number give a bound.",
        row=row,
        column=gauge_id,
        value=text,
    )
    return None
