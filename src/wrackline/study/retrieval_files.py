"""Opening files of unknown make: their text, and whether they are a retrieval, a wide table, or neither."""

from __future__ import annotations

import re
from pathlib import Path

from wrackline.study.faults import FaultLog
from wrackline.study.import_findings import Findings
from wrackline.study.retrievals import is_header, read_retrieval
from wrackline.study.wide_tables import looks_wide, read_wide

UNREADABLE = frozenset(["missing_file", "unreadable_file", "empty_file", "not_text", "web_page"])
"""Faults after which nothing can be said about what a file holds."""


def without_doubles(paths: list[Path], log: FaultLog) -> list[Path]:
    """Return every file once, though it may be named twice."""
    seen: dict[Path, Path] = {}
    for path in paths:
        if seen.setdefault(path.resolve(), path) is not path:
            log.warning("named_twice", path.name, "The file is named twice and read once.")
    return list(seen.values())


def name_files(paths: list[Path]) -> list[str]:
    """Return what to call each file: its name, or its whole path where two different files share a name."""
    of_name: dict[str, set[Path]] = {}
    for path in paths:
        of_name.setdefault(path.name, set()).add(path)
    return [path.name if len(of_name[path.name]) == 1 and path.name else str(path) for path in paths]


def read_file(
    path: Path, file: str, water_year_starts: int, flow_unit: str | None, into: Findings, log: FaultLog
) -> None:
    """Read one file, whatever it is; findings go into ``into``, faults into the log."""
    data = _read_bytes(path, file, log)
    text = None if data is None else _decode(data, file, log)
    if text is None:
        return
    lines = re.split(r"\r\n|\n|\r", text)
    first = next((line for line in lines if line.strip() and not line.startswith("#")), "")
    if first.lstrip()[:1] in ("<", "{"):
        told = re.sub(r"\s+", " ", re.sub("<[^>]*>", " ", text[:20000])).strip()[:120]
        log.problem(
            "web_page",
            file,
            f"This is a web page or an answer of a server, not a table: '{told}'.",
            "Retrieve it again as tab-separated text.",
        )
    elif not first or is_header([cell.strip() for cell in first.split("\t")]):
        read_retrieval(lines, file, water_year_starts, into, log)
    elif is_header([cell.strip(' "') for cell in re.split("[,;|]", first)]):
        log.problem(
            "wrong_separator",
            file,
            "The columns of a retrieval are there, but not parted by tabulators.",
            "Take the file as it was retrieved, not as a spreadsheet saved it.",
            row=lines.index(first) + 1,
        )
    elif looks_wide(lines):
        read_wide(lines, file, water_year_starts, flow_unit, into, log)
    else:
        log.problem(
            "unknown_form",
            file,
            f"This is neither a retrieval (tab-separated, with column site_no) nor a wide table: '{first.strip()[:120]}'.",
            "A wide table has a header row of gauges, and years or dates (1936, 1936-03-18) in its first column.",
            row=lines.index(first) + 1,
        )


def _read_bytes(path: Path, file: str, log: FaultLog) -> bytes | None:
    if path.is_dir():
        log.problem("missing_file", file, "This is a folder; a file is expected.", "Name the files in it.")
        return None
    try:
        data = path.read_bytes()
    except FileNotFoundError:
        log.problem("missing_file", file, "There is no such file.", "Is its name spelt right?")
        return None
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or error
        log.problem("unreadable_file", file, f"The file cannot be read: {reason}.")
        return None
    if not data.strip():
        log.problem("empty_file", file, "The file is empty.", "Retrieve it again, or leave it out.")
        return None
    return data


def _decode(data: bytes, file: str, log: FaultLog) -> str | None:
    if data[:2] in (b"\xff\xfe", b"\xfe\xff"):
        log.problem("not_text", file, "The file is in UTF-16 ('Unicode text').", "Save it as UTF-8.")
        return None
    packed = data[:4] == b"PK\x03\x04" or data[:2] == b"\x1f\x8b" or data[:4] == b"\xd0\xcf\x11\xe0"
    if packed or b"\0" in data or data[:4] == b"%PDF":
        what = "a workbook or packed" if packed else "binary, damaged or a document"
        log.problem(
            "not_text", file, f"This is no plain text ({what}).", "Retrieve or save it as plain text."
        )
        return None
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        log.warning(
            "wrong_encoding",
            file,
            f"The file is not UTF-8 (byte {error.start + 1} is hexadecimal {data[error.start]:02X}); it is read as Latin-1.",
            "Look at the names in gauges.csv.",
            row=data.count(b"\n", 0, error.start) + 1,
        )
        return data.decode("cp1252", errors="replace")
