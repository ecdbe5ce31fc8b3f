"""``wrackline import``: public retrievals and wide tables to the tables of a study."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Literal

import typer

if TYPE_CHECKING:
    from wrackline.study.importing import ImportedPeaks


def import_files(
    files: Annotated[
        list[Path], typer.Argument(metavar="FILE...", help="Retrievals, site lists, wide tables.")
    ],
    into: Annotated[
        Path, typer.Option(metavar="FOLDER", help="The study's folder; made if it is not there.")
    ],
    water_year_starts: Annotated[
        int | None,
        typer.Option(min=1, max=12, help="First month of the water year; else the study file's, else 10."),
    ] = None,
    flow_unit: Annotated[
        Literal["m3/s", "ft3/s"] | None,
        typer.Option(help="Unit of wide tables; else the study file's. Retrievals are in ft3/s."),
    ] = None,
) -> None:
    """Read public retrievals of annual peaks, or wide tables, into a study's tables.

    A FILE is a tab-delimited retrieval of annual peaks (ft3/s) as the US national water database serves it,
    with one gauge or many; a site list of that database (names, coordinates, areas in mi2); or a wide table with
    water years or dates in its first column and a gauge in every other (unit by --flow-unit). Numbers are written as
    they are, nothing is converted. Written are peaks.csv, thresholds.csv, gauges.csv (what is known; the rest blank
    and named), import_account.csv (what became of every row) and, where there is none, study.yaml.

    Exit status: 0 imported (warnings allowed), 1 problems or a table that already has rows, 2 a file cannot be read.

    Example: wrackline import peaks.txt sites.txt --into my_region
    """
    from wrackline.cli import print_faults
    from wrackline.study.importing import import_peaks

    done = import_peaks(files, into, water_year_starts=water_year_starts, flow_unit=flow_unit)
    print_faults((), done.warnings)
    for line in _describe(done):
        print(line)
    print(f"Next: fill in what the warnings name, then: wrackline check {into / 'study.yaml'}")


def _describe(done: ImportedPeaks) -> list[str]:
    from wrackline.study.retrieval_codes import CODES

    lines = []
    for file, account in done.account.groupby("file", sort=False):
        fates = account["fate"].value_counts()
        told = ", ".join(f"{fates[fate]} {word}" for fate, word in _FATES.items() if fate in fates)
        lines.append(f"{file}: {len(account)} rows read: {told}.")
    for code, count in done.codes.items():
        meaning = (
            f"{CODES[code].meaning}: {CODES[code].becomes}" if code in CODES else "not known: noted only"
        )
        lines.append(f"code {code.capitalize()} on {count} rows ({meaning})")
    kinds = done.peaks["kind"].value_counts()
    lines.append(
        f"{len(done.peaks)} peaks ({kinds.get('historic', 0)} historic) of {len(done.gauges)} gauges, "
        f"{len(done.thresholds)} spans of thresholds."
    )
    return [*lines, *(f"written: {path}" for path in done.written)]


_FATES = {"peak": "peaks", "gauge": "gauges", "merged": "merged with others", "left out": "left out"}
