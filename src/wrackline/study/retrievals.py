"""Public retrievals in tab-delimited text: annual peaks and lists of sites, as the national water database serves them."""

from __future__ import annotations

import math
import re
from dataclasses import dataclass

from wrackline.study.faults import FaultLog
from wrackline.study.import_findings import Findings, FoundPeak, FoundSite, is_flow, is_identifier
from wrackline.study.peaks import water_years_of
from wrackline.study.retrieval_codes import read_codes
from wrackline.study.vocabulary import EARLIEST_YEAR, LATEST_YEAR

_WIDTH = re.compile(r"[0-9]*[sdnSDN]?")
_DATE = re.compile(r"([0-9]{4})(?:-([0-9]{2})(?:-([0-9]{2}))?)?")
_LISTED_SITE = re.compile(r"#\s{1,4}([A-Z]{2,6})\s+([0-9]{8,15})\s+(\S.*)")
SHORTEST_NUMBER = 8
"""Station numbers of the national database have at least so many digits."""


@dataclass(frozen=True)
class Line:
    """A data row as its cells by column name."""

    file: str
    row: int
    cells: dict[str, str]

    def __getitem__(self, column: str) -> str:
        return self.cells.get(column, "")

    def place(self, column: str) -> dict[str, object]:
        return {"row": self.row, "column": column, "value": self[column]}


def is_header(cells: list[str]) -> bool:
    return "site_no" in cells


def read_retrieval(
    lines: list[str], file: str, water_year_starts: int, into: Findings, log: FaultLog
) -> None:
    """Read all tables of one retrieval; peaks, sites and names are added to ``into``, faults to the log."""
    header: list[str] | None = None
    kinds: set[str] = set()
    listed: dict[str, str] = {}
    counted = 0
    for row, text in enumerate(lines, start=1):
        if text.startswith("#"):
            if match := _LISTED_SITE.fullmatch(text.rstrip()):
                listed[match[2]] = match[3].strip()
            continue
        cells = [cell.strip() for cell in text.split("\t")]
        if not any(cells):
            continue
        if is_header(cells):
            header = _fair_header(cells, file, row, log)
            kinds.add(_kind(header))
        elif header is None:
            log.problem(
                "row_without_header",
                file,
                "The row stands above any header row.",
                "Retrieve the file again.",
                row=row,
            )
        elif not _is_width_row(cells, header):
            counted += 1
            line = _line(cells, header, file, row, log)
            if line is not None:
                _read_line(line, _kind(header), water_year_starts, into, log)
    into.names |= {number: name for number, name in listed.items() if number not in into.names}
    if "peaks" in kinds:
        into.units[file] = "ft3/s"
    if "sites" in kinds:
        into.area_units[file] = "mi2"
    _judge_whole(lines, file, counted, log)
    _tell_silent_sites(listed, into, file, kinds, log)


def _kind(header: list[str]) -> str:
    return "peaks" if "peak_va" in header else "sites" if "station_nm" in header else ""


def _fair_header(cells: list[str], file: str, row: int, log: FaultLog) -> list[str]:
    missing = [name for name in ("peak_dt", "peak_cd") if "peak_va" in cells and name not in cells]
    doubled = sorted({name for name in cells if name and cells.count(name) > 1})
    for name in missing:
        log.problem(
            "missing_column", file, "The column is missing.", "Retrieve it again.", row=row, column=name
        )
    for name in doubled:
        log.problem(
            "duplicate_column", file, "The column stands twice.", "Retrieve it again.", row=row, column=name
        )
    if not _kind(cells):
        log.problem(
            "not_peaks",
            file,
            f"The table holds neither annual peaks nor sites; its columns are {', '.join(filter(None, cells[:8]))}.",
            "Retrieve annual peaks (column peak_va) or a site list (column station_nm).",
            row=row,
        )
    return cells


def _is_width_row(cells: list[str], header: list[str]) -> bool:
    if not all(_WIDTH.fullmatch(cell) for cell in cells):
        return False
    return any(cell[-1:].isalpha() for cell in cells) and len(cells) <= len(header)


def _line(cells: list[str], header: list[str], file: str, row: int, log: FaultLog) -> Line | None:
    if any(cells[len(header) :]):
        log.problem(
            "ragged_row",
            file,
            f"The row has {len(cells)} cells, the header {len(header)}.",
            "Retrieve the file again; no cell may hold a tabulator.",
            row=row,
        )
        return None
    return Line(file, row, dict(zip(header, cells, strict=False)))


def _read_line(line: Line, kind: str, starts: int, into: Findings, log: FaultLog) -> None:
    if not kind or not _number_is_fair(line, log):
        return
    if kind == "sites":
        into.sites.append(_site(line, log))
    elif (peak := _peak(line, starts, log)) is not None:
        into.peaks.append(peak)


def _number_is_fair(line: Line, log: FaultLog) -> bool:
    number = line["site_no"]
    if not number:
        log.problem(
            "blank",
            line.file,
            "The row names no gauge.",
            "Retrieve the file again.",
            row=line.row,
            column="site_no",
        )
    elif not is_identifier(number):
        log.problem(
            "bad_identifier",
            line.file,
            "A station number holds letters, digits, '-', '_' and '.' only.",
            "Retrieve the file again; was it damaged?",
            **line.place("site_no"),
        )
    elif line["agency_cd"] == "USGS" and number.isdigit() and len(number) < SHORTEST_NUMBER:
        log.problem(
            "lost_leading_zeros",
            line.file,
            f"A station number of this agency has {SHORTEST_NUMBER} digits or more; leading zeros seem to be lost.",
            f"Is it '{number.zfill(SHORTEST_NUMBER)}'? Take the file as it was retrieved, not as a spreadsheet saved it.",
            **line.place("site_no"),
        )
    else:
        return True
    return False


def _peak(line: Line, starts: int, log: FaultLog) -> FoundPeak | None:
    date = _date(line, log)
    value = _flow(line, log)
    if date is None or value is None:
        return None
    said = read_codes(line["peak_cd"])
    if said.unknown:
        log.warning(
            "unknown_code",
            line.file,
            f"No meaning is known here for code {', '.join(said.unknown)}; the peak is kept and the code noted.",
            "Read the comments at the head of the file, and decide on the peak in the ledger.",
            **line.place("peak_cd"),
        )
    span = water_years_of(date, starts) if date else None
    flags, words = said.flags, said.words
    if span is not None and span[0] != span[1]:
        flags = tuple(sorted({*flags, "date_uncertain"}))
        words = "; ".join(
            filter(None, [words, f"month unknown: the year of the date, {date}, is kept as water year"])
        )
    bound = next(iter(said.bounds)) if len(said.bounds) == 1 else ""
    return FoundPeak(
        file=line.file,
        row=line.row,
        gauge_id=line["site_no"],
        value=value,
        date=date,
        water_year=span[0] if span else 0,
        bound=bound,
        historic=said.historic,
        flags=flags,
        cause=said.cause,
        words=words,
        codes=(*said.codes, *said.unknown),
        stage=line["gage_ht"] or line["ag_gage_ht"],
        left_out=_reason_to_leave_out(
            line, value, date, contradict=len(said.bounds) > 1, historic=said.historic
        ),
        highest_since=line["year_last_pk"] if re.fullmatch(r"[0-9]{4}", line["year_last_pk"]) else "",
    )


def _reason_to_leave_out(line: Line, value: str, date: str, *, contradict: bool, historic: bool) -> str:
    if not value:
        stage = line["gage_ht"] or line["ag_gage_ht"]
        if not stage:
            return "no discharge and no gauge height" + (
                ": a historic flood of unknown size" if historic else ""
            )
        kind = "a historic flood happened" if historic else "a flood happened"
        return f"no discharge, only a gauge height of {stage} ft: {kind}, its flow is not known"
    if not date:
        return "no date: the water year of the peak is not known"
    if contradict:
        return "its codes contradict each other: both less and greater than the value"
    return ""


def _date(line: Line, log: FaultLog) -> str | None:
    """Return what is known of the date; None when the cell cannot be one."""
    text = line["peak_dt"]
    match = _DATE.fullmatch(text)
    if not text or text.startswith("0000"):
        return ""
    if match:
        year, month, day = match[1], match[2] or "00", match[3] or "00"
        known = year if month == "00" else f"{year}-{month}" if day == "00" else f"{year}-{month}-{day}"
        if EARLIEST_YEAR <= int(year) < LATEST_YEAR and water_years_of(known, 10) is not None:
            return known
    log.problem(
        "malformed_date",
        line.file,
        "This is not a date.",
        "A retrieval writes 1936-03-18, 1936-03-00 or 1936; take the file as it was retrieved.",
        **line.place("peak_dt"),
    )
    return None


def _flow(line: Line, log: FaultLog) -> str | None:
    """Return the flow as the file writes it, blank where there is none; None when the cell cannot be one."""
    text = line["peak_va"]
    if not text or is_flow(text):
        return text
    negative = text.startswith("-") and is_flow(text[1:])
    log.problem(
        "negative" if negative else "not_a_number",
        line.file,
        "The number cannot be negative." if negative else "A number is expected.",
        "Blank the cell where the discharge is not known.",
        **line.place("peak_va"),
    )
    return None


def _site(line: Line, log: FaultLog) -> FoundSite:
    latitude, longitude = (
        _degrees(line, name, limit, log) for name, limit in (("dec_lat_va", 90), ("dec_long_va", 180))
    )
    if latitude is None and line["lat_va"]:
        log.warning(
            "no_decimal_degrees",
            line.file,
            "The site has its coordinates in degrees, minutes and seconds without a sign; they are left blank.",
            "Retrieve the site list with decimal degrees (columns dec_lat_va, dec_long_va).",
            **line.place("lat_va"),
        )
    return FoundSite(
        file=line.file,
        row=line.row,
        gauge_id=line["site_no"],
        name=line["station_nm"],
        latitude=latitude,
        longitude=longitude,
        area=_area(line, "drain_area_va", log),
        contributing_area=_area(line, "contrib_drain_area_va", log),
    )


def _degrees(line: Line, column: str, limit: float, log: FaultLog) -> float | None:
    text = line[column]
    if not text:
        return None
    if is_flow(text.removeprefix("-")) and abs(float(text)) <= limit:
        return float(text)
    log.problem(
        "coordinates_out_of_range",
        line.file,
        f"Degrees between -{limit:g} and {limit:g} are expected.",
        "Retrieve the site list again.",
        **line.place(column),
    )
    return None


def _area(line: Line, column: str, log: FaultLog) -> float | None:
    text = line[column]
    if not text:
        return None
    if is_flow(text) and 0 < float(text) < math.inf:
        return float(text)
    log.problem(
        "not_positive",
        line.file,
        "An area above zero is expected.",
        "Retrieve the list again.",
        **line.place(column),
    )
    return None


def _judge_whole(lines: list[str], file: str, counted: int, log: FaultLog) -> None:
    last = lines[-1] if lines else ""
    if not counted:
        remark = next((text.strip("# \t") for text in reversed(lines) if text.strip("# \t")), "")
        log.problem(
            "no_rows",
            file,
            f"The file holds no rows of data. Its last line: '{remark[:120]}'.",
            "Retrieve it again, or leave it out.",
        )
    elif last and not last.startswith("#"):
        fullest = max(text.count("\t") for text in lines if not text.startswith("#"))
        if last.count("\t") < fullest:
            log.warning(
                "cut_off",
                file,
                "The file ends in the middle of a line with fewer cells than others: it may have been cut off.",
                "Compare its last row with the source.",
                row=len(lines),
            )


def _tell_silent_sites(
    listed: dict[str, str], into: Findings, file: str, kinds: set[str], log: FaultLog
) -> None:
    if "peaks" not in kinds:
        return
    with_rows = {peak.gauge_id for peak in into.peaks if peak.file == file}
    silent = sorted(set(listed) - with_rows)
    if silent:
        log.warning(
            "site_without_rows",
            file,
            f"The head of the file lists sites without any row: {', '.join(silent[:10])}{' ...' if silent[10:] else ''}.",
            "Is the file complete?",
        )
