"""Tables with units: how a stage states what its columns mean, and how every table is written."""

from __future__ import annotations

import os
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

FORMULA_STARTS = ("=", "+", "-", "@", "\t", "\r")


@dataclass(frozen=True)
class Column:
    """What one column of a published table holds."""

    name: str
    unit: str
    meaning: str


@dataclass(frozen=True)
class Table:
    """A published table: its name (the file's stem), its rows, and what its columns mean.

    Raises
    ------
    ValueError
        When the frame's columns and the stated columns differ.
    """

    name: str
    frame: pd.DataFrame
    columns: tuple[Column, ...]

    def __post_init__(self) -> None:
        stated = [column.name for column in self.columns]
        if stated != list(self.frame.columns):
            raise ValueError(
                f"table {self.name}: columns {list(self.frame.columns)} are not those stated, {stated}"
            )


@contextmanager
def replacing(path: Path) -> Iterator[Path]:
    """Yield a temporary path beside ``path`` and move it into place only when all went well.

    A killed process leaves the old file or none, never half of a new one.
    """
    path.parent.mkdir(parents=True, exist_ok=True)
    temporary = path.with_name(f".{path.name}.part")
    try:
        yield temporary
        os.replace(temporary, path)
    finally:
        temporary.unlink(missing_ok=True)


def write_text(path: Path, text: str) -> None:
    """Write UTF-8 text with ``\\n`` line ends, all or nothing."""
    with replacing(path) as part:
        part.write_bytes(text.encode("utf-8"))


def write_table(path: Path, frame: pd.DataFrame) -> None:
    """Write a table as CSV: shortest exact numbers, ``true``/``false``, blank for not applicable.

    Numbers keep every digit (the shortest text that reads back to the same number), so tables serve
    as intermediates too. Infinite numbers are blank: an unbounded end. Text that a spreadsheet would
    take for a formula gets a leading apostrophe.
    """
    ready = pd.DataFrame({name: _as_csv_text(frame[name]) for name in frame.columns})
    with replacing(path) as part:
        ready.to_csv(part, index=False, lineterminator="\n", encoding="utf-8")


def read_table(path: Path, text: tuple[str, ...] = ()) -> pd.DataFrame:
    """Read a table written by `write_table`; the columns named in ``text`` stay text, blank as ``""``.

    Every column ending in ``_id`` is text as well, so identifiers keep their leading zeros.
    """
    header = pd.read_csv(path, nrows=0, encoding="utf-8").columns
    as_text = [name for name in header if name.endswith("_id") or name in text]
    frame = pd.read_csv(
        path,
        dtype={name: str for name in as_text},
        keep_default_na=False,
        na_values={name: [""] for name in header if name not in as_text},
        encoding="utf-8",
    )
    for name in as_text:
        frame[name] = [_without_apostrophe(value) for value in frame[name]]
    for name in frame.columns:
        if name not in as_text and frame[name].dtype == object:
            frame[name] = frame[name].map({"true": True, "false": False}).fillna(frame[name])
    return frame


def _as_csv_text(values: pd.Series) -> list[str]:
    if values.dtype == bool:
        return ["true" if value else "false" for value in values]
    return [_cell(value) for value in values.tolist()]


def _cell(value: Any) -> str:
    if value is None or value is pd.NA or value is pd.NaT:
        return ""
    if isinstance(value, (bool, np.bool_)):
        return "true" if value else "false"
    if isinstance(value, (float, np.floating)):
        return repr(float(value)) if np.isfinite(value) else ""
    if isinstance(value, str):
        return "'" + value if value.startswith(FORMULA_STARTS) else value
    return str(value)


def _without_apostrophe(value: str) -> str:
    return value[1:] if value.startswith("'") and value[1:].startswith(FORMULA_STARTS) else value
