"""One gauge's peaks without a study: the same checks and rules of use as a study's peaks table."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
import pandas as pd

from wrackline.hydrology.records import PeakRecords
from wrackline.study.config import StudyConfig
from wrackline.study.csv_files import Sheet, is_readable, read_sheet
from wrackline.study.faults import Fault, FaultLog, StudyFaults
from wrackline.study.ledger import empty_ledger
from wrackline.study.loading import UnreadableStudy
from wrackline.study.peaks import read_peaks
from wrackline.study.record_building import build_records
from wrackline.study.spans import no_periods, no_thresholds, read_thresholds
from wrackline.study.vocabulary import PEAKS, THRESHOLDS, InputTable, nearest_word

UNREADABLE = frozenset(
    ["missing_file", "unreadable_file", "empty_file", "not_csv", "utf16", "nul_byte", "wrong_encoding"]
)
"""Faults after which nothing can be said about what a file holds."""


@dataclass(frozen=True)
class SingleRecord:
    """One gauge's record and how it came about.

    Attributes
    ----------
    records : PeakRecords
        Of one gauge, m3/s.
    accounting : DataFrame
        One line for every row of the peaks table: `row`, `water_year`, `fate`, `reason`.
    warnings : tuple of Fault
    """

    records: PeakRecords
    accounting: pd.DataFrame
    warnings: tuple[Fault, ...]


def read_single_record(
    peaks: str | Path | pd.DataFrame,
    thresholds: str | Path | pd.DataFrame | None = None,
    flow_unit: str = "m3/s",
    water_year_starts: int = 10,
) -> SingleRecord:
    """Read and check the peaks of one gauge.

    Parameters
    ----------
    peaks : path or DataFrame
        Columns `water_year`, `flow` and the optional ones of a study's peaks table. `gauge_id` may be there, with
        one identifier throughout.
    thresholds : path or DataFrame, optional
        Columns `first_year`, `last_year`, `low` and optionally `high`, `why`.
    flow_unit : {"m3/s", "ft3/s"}
        Unit of all flows.
    water_year_starts : int
        First month of the water year; used to check dates.

    Raises
    ------
    UnreadableStudy
        When a file cannot be read at all.
    StudyFaults
        With every problem of both tables.
    """
    log = FaultLog()
    peaks_file, thresholds_file = _name_of(peaks, "peaks"), _name_of(thresholds, "thresholds")
    config = StudyConfig.model_validate(
        {
            "inputs": {"peaks": peaks_file, "thresholds": "" if thresholds is None else thresholds_file},
            "units": {"flow": flow_unit},
            "water_year_starts": water_year_starts,
        }
    )
    sheet = _sheet(peaks, peaks_file, PEAKS, log)
    spans = None if thresholds is None else _sheet(thresholds, thresholds_file, THRESHOLDS, log)
    if any(fault.code in UNREADABLE for fault in log.problems):
        raise UnreadableStudy(log.problems, log.warnings)
    gauge_id = _one_gauge(sheet, Path(peaks_file).stem, log) if sheet is not None else ""
    of_spans = no_thresholds()
    if spans is not None:
        of_spans = read_thresholds(_for_gauge(spans, gauge_id), [gauge_id], config.flow_in_m3s, log)
    if sheet is None:
        raise StudyFaults(log.problems, log.warnings)
    checked = read_peaks(
        _for_gauge(sheet, gauge_id), [gauge_id], config.flow_in_m3s, config.water_year_starts, log
    )
    built = build_records([gauge_id], checked, of_spans, no_periods(), empty_ledger(), config, log)
    log.stop_on_problems()
    return SingleRecord(built.records, built.accounting, tuple(log.warnings))


def _name_of(table: str | Path | pd.DataFrame | None, role: str) -> str:
    return role if table is None or isinstance(table, pd.DataFrame) else Path(table).name


def _without_gauge(table: InputTable) -> InputTable:
    """The columns of a table of one gauge: the identifier may be left out."""
    columns = tuple(replace(c, required=c.required and c.name != "gauge_id") for c in table.columns)
    return replace(table, columns=columns)


def _sheet(source: str | Path | pd.DataFrame, file: str, table: InputTable, log: FaultLog) -> Sheet | None:
    if isinstance(source, pd.DataFrame):
        return _sheet_of_frame(source, file, table, log)
    path = Path(source)
    if path.is_file():
        if not is_readable(path, file, log):
            return None
        return read_sheet(path, file, _without_gauge(table), {}, log)
    beside = [p.name for p in path.parent.iterdir() if p.is_file()] if path.parent.is_dir() else []
    near = nearest_word(path.name, beside)
    what = "This is a folder; a file is expected." if path.is_dir() else "There is no such file."
    log.problem("missing_file", str(path), what, f"Did you mean '{near}'?" if near else "")
    return None


def _sheet_of_frame(frame: pd.DataFrame, file: str, table: InputTable, log: FaultLog) -> Sheet | None:
    """Return a table of memory as text; its rows are numbered as if it were saved with a header."""
    lacking = [
        name for name in table.required if name not in frame.columns and name not in ("gauge_id", "why")
    ]
    for name in lacking:
        near = nearest_word(name, [str(column) for column in frame.columns])
        log.problem(
            "missing_column",
            file,
            "The column is missing.",
            f"Is it '{near}'? Then rename that." if near else "Add it.",
            column=name,
        )
    if lacking:
        return None
    cells = {}
    for name in table.names:
        if name in frame.columns:
            text = np.empty(len(frame), dtype=object)
            text[:] = ["" if pd.isna(value) else str(value).strip() for value in frame[name]]
            cells[name] = text
    if len(frame) == 0 and table.when_empty == "problem":
        log.problem("no_rows", file, "The table has no rows.", f"Add a row for every {table.row_is}.")
    return Sheet(file, np.arange(len(frame), dtype=np.int64) + 2, cells)


def _one_gauge(sheet: Sheet, otherwise: str, log: FaultLog) -> str:
    """Return the record's identifier, or `otherwise` where it has none; more than one is a problem."""
    names = list(dict.fromkeys(name for name in sheet.text("gauge_id").tolist() if name))
    if len(names) > 1:
        other = int(np.flatnonzero(sheet.text("gauge_id") == names[1])[0])
        log.problem(
            "several_gauges",
            sheet.file,
            f"The file holds {len(names)} gauges; one is expected.",
            "Keep the rows of one gauge, or make a study of them with `wrackline new`.",
            row=sheet.rows[other],
            column="gauge_id",
            value=names[1],
        )
        raise StudyFaults(log.problems, log.warnings)
    return names[0] if names else otherwise


def _for_gauge(sheet: Sheet, gauge_id: str) -> Sheet:
    """Return the rows with the identifier filled in where it is blank."""
    named = np.full(len(sheet), gauge_id, dtype=object)
    if "gauge_id" in sheet:
        given = sheet.text("gauge_id")
        named = np.where(given == "", gauge_id, given)
    return replace(sheet, cells={**sheet.cells, "gauge_id": named})
