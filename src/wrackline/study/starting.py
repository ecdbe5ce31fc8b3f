"""A new study to fill in: a commented study file, tables with their header, and what the columns mean."""

from __future__ import annotations

from pathlib import Path

from wrackline.study.config import FLAG_NAMES
from wrackline.study.faults import FaultLog
from wrackline.study.tables import write_text
from wrackline.study.vocabulary import INPUT_TABLES, InputTable

STUDY_FILE = """\
# A regional flood-frequency study. Every key may be left out: its default then holds.
# Check the study at any time:   wrackline check study.yaml
# What the columns of the tables mean is told in columns.md beside this file.

study:
  title: Regional flood-frequency study
  # region: The region in words
  # agency: Who is responsible
  # purpose: What was asked of the study
  edition: working            # name of this edition; put a number in quotes: "2026"

inputs:                       # paths are relative to this file; leave out what the study does not have
  gauges: gauges.csv
  peaks: peaks.csv
  thresholds: thresholds.csv  # perception thresholds: historic spans, crest-stage gauges
  periods: periods.csv        # spans of years when a basin was regulated, moved, built over ...
  targets: targets.csv        # ungauged sites for which floods are wanted
  redundancy: redundancy.csv  # decisions on nested pairs of gauges
  ledger: ledger.csv          # your decisions, applied by the run and printed in the report
  # basins: basins.gpkg       # layer `basins` with column `site_id`
  # regions: regions.gpkg     # layer `regions` with column `region`

units:
  flow: m3/s                  # or ft3/s
  area: km2                   # or mi2

water_year_starts: 10         # first month; the water year is named by the calendar year in which it ends

# Catchment attributes: numeric columns of gauges.csv and targets.csv, by name.
# attributes:
#   precipitation_mm:
#     unit: mm
#     meaning: mean annual precipitation of the basin
#     transform: log10        # none, log10, sqrt or log10_plus_1
#     lower: 0                # physical limits; a value outside is refused
#     upper: 12000
#     source: name of the map
#     date: "2024-05"

pooling:
  regions: column             # column (of gauges.csv), polygons (regions.gpkg) or one

index_flood:
  statistic: median           # or mean
  attributes: []              # attributes of the index-flood equation, such as [area, rain]; none: those of `regression`

# What a peak's flags do to its use: keep, exclude, below (at most the flow given), above (at least).
# flags:
#   estimated: keep
#   daily_mean: above
"""


def start_study(folder: str | Path) -> list[Path]:
    """Write a study to fill in and return the files written.

    Raises
    ------
    StudyFaults
        When the folder exists and is not empty: nothing is overwritten.
    """
    folder = Path(folder)
    if folder.exists() and (not folder.is_dir() or any(folder.iterdir())):
        log = FaultLog()
        log.problem("exists", str(folder), "The folder exists and is not empty.", "Name a new folder.")
        log.stop_on_problems()
    texts = {"study.yaml": STUDY_FILE, "columns.md": _columns_page()}
    texts |= {f"{table.name}.csv": ",".join(table.names) + "\n" for table in INPUT_TABLES}
    for name, text in texts.items():
        write_text(folder / name, text)
    return [folder / name for name in texts]


def _columns_page() -> str:
    parts = [
        "# The tables of a study\n",
        "CSV in UTF-8, commas between cells, decimal point, a header row. Identifiers are text: leading zeros count.",
        "A spreadsheet drops them unless the column is formatted as text before the file is opened.\n",
        *(_describe(table) for table in INPUT_TABLES),
        "## Flags of a peak\n",
        "`" + "`, `".join(FLAG_NAMES) + "`.\n",
        "A bound is said by `low` and `high`, a historic peak by `kind`, not by a flag.",
        "A historic peak is used only where thresholds.csv has a span for its year.\n",
    ]
    return "\n".join(parts)


def _describe(table: InputTable) -> str:
    lines = [
        f"## {table.name}.csv\n",
        f"One row per {table.row_is}.\n",
        "| column | needed | meaning |",
        "|---|---|---|",
    ]
    for column in table.columns:
        needed = "yes" if column.required else "no"
        lines.append(f"| `{column.name}` | {needed} | {column.meaning} |")
    if table.takes_attributes:
        lines.append(
            "| (attributes) | as declared | Numeric columns declared under `attributes` in study.yaml. |"
        )
    return "\n".join([*lines, ""])
