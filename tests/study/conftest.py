"""A small valid study that tests alter: six gauges, thirteen water years, every kind of input file."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest

STUDY_FILE = """\
study:
  title: Six invented gauges
inputs:
  thresholds: thresholds.csv
  periods: periods.csv
  targets: targets.csv
  redundancy: redundancy.csv
  ledger: ledger.csv
units: {flow: m3/s, area: km2}
water_year_starts: 10
attributes:
  rain_mm: {unit: mm, transform: log10, lower: 0, upper: 9000}
  lakes_pct: {unit: "%", lower: 0, upper: 100}
index_flood:
  attributes: [area, rain_mm]
"""
GAUGES = ("00101", "00102", "00103", "00104", "00105", "00106")


class SmallStudy:
    """Text of every file of a study; tables are lists of rows, so that row 1 is the header."""

    def __init__(self) -> None:
        self.study = STUDY_FILE
        self.tables = {
            "gauges.csv": _gauges(),
            "peaks.csv": _peaks(),
            "thresholds.csv": [
                ["gauge_id", "first_year", "last_year", "low", "high", "why"],
                ["00101", "1940", "1960", "400", "", "flood marks on the mill"],
            ],
            "periods.csv": [
                ["gauge_id", "first_year", "last_year", "state", "use", "why"],
                ["00102", "1991", "1992", "regulated", "false", "dam filled"],
            ],
            "targets.csv": _targets(),
            "redundancy.csv": [
                ["gauge_id", "other_id", "keep", "why"],
                ["00105", "00106", "both", "other slopes"],
            ],
            "ledger.csv": [
                ["date", "by", "subject", "action", "why", "gauge_id", "water_year", "value"],
                ["2025-11-03", "A. Analyst", "peak", "exclude", "log jam burst", "00103", "1991", ""],
                ["2025-11-04", "A. Analyst", "gauge", "keep", "short but good", "00104", "", ""],
            ],
        }
        self.raw: dict[str, bytes | None] = {}
        self.layers: dict[str, Callable[[Path], None]] = {}

    def put(self, file: str, row: int, column: str, value: str) -> None:
        """Write a cell; a column that is not there yet is added, blank elsewhere."""
        table = self.tables[file]
        if column not in table[0]:
            for line in table:
                line.append("")
            table[0][-1] = column
        table[row - 1][table[0].index(column)] = value

    def add(self, file: str, **cells: str) -> int:
        """Append a row and return its number."""
        table = self.tables[file]
        table.append([cells.get(name, "") for name in table[0]])
        return len(table)

    def drop_column(self, file: str, column: str) -> None:
        at = self.tables[file][0].index(column)
        for line in self.tables[file]:
            del line[at]

    def set_key(self, old: str, new: str) -> None:
        """Replace a piece of the study file that stands there once."""
        assert self.study.count(old) == 1
        self.study = self.study.replace(old, new)

    def text(self, file: str) -> str:
        return "".join(",".join(_quoted(cell) for cell in line) + "\n" for line in self.tables[file])

    def write(self, folder: Path) -> Path:
        """Write all files and return the study file."""
        for file in self.tables:
            (folder / file).write_bytes(self.text(file).encode())
        for file, content in self.raw.items():
            (folder / file).unlink(missing_ok=True)
            if content is not None:
                (folder / file).write_bytes(content)
        for file, draw in self.layers.items():
            draw(folder / file)
        (folder / "study.yaml").write_text(self.study, encoding="utf-8")
        return folder / "study.yaml"


def _quoted(cell: str) -> str:
    return '"' + cell.replace('"', '""') + '"' if set(cell) & set(',"\n') else cell


def _gauges() -> list[list[str]]:
    head = "gauge_id name latitude longitude area centroid_latitude centroid_longitude region regulated rain_mm lakes_pct"
    rows = [head.split()]
    for n, gauge in enumerate(GAUGES):
        latitude, longitude = 47 + 0.1 * n, -121 + 0.2 * n
        where = [
            f"{latitude:.2f}",
            f"{longitude:.2f}",
            str(100 + 50 * n),
            f"{latitude + 0.05:.2f}",
            f"{longitude:.2f}",
        ]
        rows.append(
            [gauge, f"Stream {n + 1}", *where, "north" if n > 2 else "south", "false", str(900 + 10 * n), "2"]
        )
    return rows


def _targets() -> list[list[str]]:
    head = "target_id name latitude longitude area centroid_latitude centroid_longitude region upstream_gauge rain_mm lakes_pct"
    return [
        head.split(),
        ["T1", "Ford", "47.02", "-120.95", "80", "47.03", "-120.95", "south", "00101", "905", "1"],
        ["T2", "Weir", "47.42", "-120.15", "120", "47.43", "-120.15", "north", "", "940", "0"],
    ]


def _peaks() -> list[list[str]]:
    rows = [["gauge_id", "water_year", "date", "flow", "low", "high", "kind", "cause", "flags"]]
    for n, gauge in enumerate(GAUGES):
        for year in range(1991, 2003):
            flow = 100 + 20 * n + (year * 7) % 13
            rows.append([gauge, str(year), f"{year - 1}-11-15", str(flow), "", "", "", "rain", ""])
    rows.append(["00101", "1950", "1950-02", "500", "", "", "historic", "unknown", ""])
    return rows


@pytest.fixture
def small_study() -> SmallStudy:
    return SmallStudy()
