"""Reading CSV as people save it: what is harmless is accepted, everything else is named with its place."""

from __future__ import annotations

import codecs
import csv
import io
import re
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from wrackline.study.faults import FaultLog
from wrackline.study.vocabulary import InputTable, nearest_word

TextArray = NDArray[np.object_]
IntArray = NDArray[np.int64]

_SEPARATORS = {";": "semicolons", "\t": "tabulators", "|": "vertical bars"}


@dataclass(frozen=True)
class Sheet:
    """A CSV file as text: its name, its columns, and the spreadsheet row of every line.

    Attributes
    ----------
    file : str
        The file as the study names it.
    rows : int array (n,)
        Row as a spreadsheet numbers it: the header is row 1, blank lines count, a line break inside
        quotes does not.
    cells : dict of str to object array (n,)
        Text of every column, without surrounding blanks.
    """

    file: str
    rows: IntArray
    cells: dict[str, TextArray]

    def __len__(self) -> int:
        return len(self.rows)

    def __contains__(self, column: str) -> bool:
        return column in self.cells

    def text(self, column: str) -> TextArray:
        """Return a column's text; an absent optional column is blank throughout."""
        return self.cells[column] if column in self.cells else np.full(len(self), "", dtype=object)


def read_sheet(
    path: Path, file: str, table: InputTable, attributes: Mapping[str, bool], log: FaultLog
) -> Sheet | None:
    """Read one input table as text and check its columns; None when it cannot be used at all.

    Parameters
    ----------
    path, file : Path, str
        Where it lies, and how the study names it.
    table : InputTable
        Which columns it must and may have.
    attributes : mapping of str to bool
        Attribute columns that the study declares, and whether it uses them (for tables that take them).
    """
    text = _decode(path.read_bytes(), file, log) if is_readable(path, file, log) else None
    if text is None:
        return None
    lines = _split(text, file, log)
    if not lines:
        return None
    header = [name.strip() for name in lines[0]]
    if not _header_is_fair(header, lines[1:3], file, table, log):
        return None
    body = lines[1:]
    filled = np.fromiter((any(line) for line in body), bool, len(body))
    fits = np.fromiter((len(line) == len(header) for line in body), bool, len(body))
    for at in np.flatnonzero(filled & ~fits):
        log.problem(
            "ragged_row",
            file,
            f"The row has {len(body[at])} cells, the header {len(header)}.",
            "Fill in or take out commas; put text that holds a comma in double quotes.",
            row=at + 2,
        )
    tell = {"problem": log.problem, "warning": log.warning}.get(table.when_empty)
    if not filled.any() and tell is not None:
        tell("no_rows", file, "The file has a header and no rows.", f"Add a row for every {table.row_is}.")
    kept = np.flatnonzero(filled & fits)
    columns = list(zip(*(body[at] for at in kept.tolist()), strict=True)) or [()] * len(header)
    cells = {name: _stripped(column) for name, column in zip(header, columns, strict=True) if name}
    sheet = Sheet(file, kept + 2, cells)
    return sheet if _columns_are_fair(sheet, table, attributes, log) else None


def _stripped(column: tuple[str, ...]) -> TextArray:
    out = np.empty(len(column), dtype=object)
    out[:] = [cell.strip() for cell in column]
    return out


def is_readable(path: Path, file: str, log: FaultLog) -> bool:
    """Report a file that is not there or cannot be opened; pipes and devices, which may never end, are not."""
    try:
        if path.exists() and not (path.is_file() or path.is_dir()):
            log.problem("unreadable_file", file, "This is a pipe or a device, not a file.")
            return False
        with path.open("rb"):
            return True
    except FileNotFoundError:
        beside = [p.name for p in path.parent.iterdir() if p.is_file()] if path.parent.is_dir() else []
        near = nearest_word(path.name, beside)
        log.problem(
            "missing_file",
            file,
            "The study names this file, but it is not there.",
            f"Did you mean '{near}'?"
            if near
            else "Put it there, or take its line out of `inputs` in the study file.",
        )
    except OSError as error:
        log.problem("unreadable_file", file, f"The file cannot be read: {error.strerror}.")
    return False


def _decode(data: bytes, file: str, log: FaultLog) -> str | None:
    if not data.removeprefix(codecs.BOM_UTF8).strip():
        log.problem("empty_file", file, "The file is empty.", "It needs at least its header row.")
    elif data[:4] == b"PK\x03\x04" or data[:8] == b"\xd0\xcf\x11\xe0\xa1\xb1\x1a\xe1":
        log.problem(
            "not_csv", file, "This is a spreadsheet workbook, not CSV.", "Save the sheet as 'CSV UTF-8'."
        )
    elif data[:2] in (b"\xff\xfe", b"\xfe\xff") or b"\0" in data[:4]:
        log.problem("utf16", file, "The file is in UTF-16 ('Unicode text').", "Save it as 'CSV UTF-8'.")
    elif b"\0" in data:
        at = data.index(b"\0")
        log.problem(
            "nul_byte",
            file,
            f"Byte {at + 1} is NUL, which no text holds: the file is damaged or was cut off while written.",
            "Export or copy it again.",
            row=data.count(b"\n", 0, at) + 1,
        )
    else:
        try:
            return data.decode("utf-8-sig")
        except UnicodeDecodeError as error:
            at = error.start + (3 if data.startswith(b"\xef\xbb\xbf") else 0)
            log.problem(
                "wrong_encoding",
                file,
                f"Byte {at + 1} (hexadecimal {data[at]:02X}) is not UTF-8; the file is likely {_likely_encoding(data)}.",
                "Save it as 'CSV UTF-8'.",
                row=data.count(b"\n", 0, at) + 1,
            )
    return None


def _likely_encoding(data: bytes) -> str:
    """Guess an 8-bit encoding from how bytes above 127 stand: alone among ASCII letters, or in words."""
    runs = re.findall(rb"[\x80-\xff]+", data)
    if sum(map(len, runs)) < 3 * len(runs):
        return "Mac OS Roman" if all(max(run) < 0xA0 for run in runs) else "Windows-1252 (Western European)"
    if sum(byte >= 0xC0 for run in runs for byte in run) > 0.9 * sum(map(len, runs)):
        return "Windows-1251 (Cyrillic)"
    return "an East Asian encoding (Shift JIS, GB 18030, Big5 or EUC-KR)"


def _split(text: str, file: str, log: FaultLog) -> list[list[str]]:
    reader = csv.reader(io.StringIO(text.replace("\r\n", "\n").replace("\r", "\n"), newline=""), strict=True)
    lines: list[list[str]] = []
    try:
        lines.extend(reader)
    except csv.Error as error:
        log.problem(
            "bad_quotes",
            file,
            f"The quotation marks of this row do not close, or stand inside a cell ({error}).",
            'Put the whole cell in double quotes and double those inside it: "6"" pipe".',
            row=len(lines) + 1,
        )
        return []
    return lines


def _header_is_fair(
    header: list[str], sample: list[list[str]], file: str, table: InputTable, log: FaultLog
) -> bool:
    if len(header) == 1:
        for separator, name in _SEPARATORS.items():
            if separator in header[0]:
                commas = any(re.search(r"\d,\d", ",".join(line)) for line in sample)
                log.problem(
                    "wrong_separator",
                    file,
                    f"Cells are separated by {name}"
                    + (", and numbers have a decimal comma." if commas else "."),
                    "Save it with commas between cells and a decimal point in numbers.",
                    row=1,
                )
                return False
    doubled = sorted({name for name in header if name and header.count(name) > 1})
    for name in doubled:
        log.problem(
            "duplicate_column",
            file,
            "The column stands twice in the header.",
            "Keep one.",
            row=1,
            column=name,
        )
    for number, name in enumerate(header, start=1):
        if not name and any(len(line) >= number and line[number - 1].strip() for line in sample):
            log.problem(
                "nameless_column", file, f"Column {number} has no name.", "Name it or take it out.", row=1
            )
    return not doubled


def _columns_are_fair(sheet: Sheet, table: InputTable, attributes: Mapping[str, bool], log: FaultLog) -> bool:
    declared = attributes if table.takes_attributes else {}
    strangers = [name for name in sheet.cells if name not in table.names and name not in declared]
    fair = True
    for name in (*table.required, *declared):
        if name not in sheet:
            near = nearest_word(name, strangers)
            tell = log.problem if declared.get(name, True) else log.warning
            mend = f"Is it '{near}'? Then rename that." if near else "Add it."
            tell("missing_column", sheet.file, "The column is missing.", mend, row=1, column=name)
            fair = fair and name in declared
            strangers = [stranger for stranger in strangers if stranger != near]
    unlike = []
    for name in strangers:
        meant = nearest_word(name, [n for n in table.names if n not in sheet])
        if meant is None:
            unlike.append(name)
        else:
            mend = f"Is it '{meant}'? Then rename it."
            log.warning("unused_column", sheet.file, "The column is not used.", mend, row=1, column=name)
    if unlike:
        mend = (
            "Declare catchment attributes under `attributes` in the study file."
            if table.takes_attributes
            else ""
        )
        log.warning(
            "unused_column", sheet.file, f"Columns not used: {', '.join(sorted(unlike))}.", mend, row=1
        )
    return fair
