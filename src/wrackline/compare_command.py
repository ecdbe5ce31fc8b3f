"""``wrackline compare``: which numbers moved between two editions, and why."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

if TYPE_CHECKING:
    from wrackline.stages.comparison import Comparison

SHOWN = 5


def compare(
    old: Annotated[
        Path, typer.Argument(metavar="OLD", help="The earlier edition's folder, or a results folder.")
    ],
    new: Annotated[Path, typer.Argument(metavar="NEW", help="The later one.")],
    json: Annotated[
        bool, typer.Option("--json", help="Print all changes and shares, unrounded, as JSON.")
    ] = False,
    into: Annotated[
        Path | None, typer.Option(metavar="FOLDER", help="Write the tables there, as CSV, too.")
    ] = None,
) -> None:
    """Tell which floods moved between two editions of a study, by how much, and why.

    Every change is shared among its causes: the software, the gauge's own record (new peaks, revised peaks, thresholds
    and flags), generalized skew, regional models, the site's attributes, and choices. Shares are in per cent of the old
    flood and sum to the change. Flows are in the new edition's declared unit. The inputs of both editions are run
    again in a temporary folder, which takes a few runs' time.

    Exit status: 0 compared, 1 problems (altered, no finished run), 2 a file cannot be read.

    Example: wrackline compare my_region/editions/2024 my_region/editions/2025
    """
    from wrackline.comparing import compare as compare_paths
    from wrackline.stages.compare_page import comparison_tables
    from wrackline.study.contribution import to_json
    from wrackline.study.tables import write_table

    found = compare_paths(old, new)
    if into is not None:
        for table in comparison_tables(found):
            write_table(into / f"{table.name}.csv", table.frame)
    if json:
        print(to_json(describe(found)), end="")
    else:
        _print(found)


def describe(found: Comparison) -> dict[str, Any]:
    """All changes as plain data: per site and probability old, new, interval and shares; differences of the inputs."""
    from wrackline.stages.compare_page import biggest_movers, comparison_tables, tell_mover

    tables = {table.name: _records(table.frame) for table in comparison_tables(found)}
    return {
        "old": found.old,
        "new": found.new,
        "flow_unit": found.flow_unit,
        **tables,
        "biggest_movers": [tell_mover(found, site) for site in biggest_movers(found, SHOWN)],
        "not_compared": [f"{kind} {site} {what}" for kind, site, what in found.missing],
        "notes": list(found.notes),
    }


def _records(frame: Any) -> list[dict[str, Any]]:
    rows = frame.astype(object).where(frame.notna(), None).to_dict("records")
    return [{str(key): value for key, value in row.items()} for row in rows]


def _print(found: Comparison) -> None:
    from wrackline.stages.compare_page import change_section

    for paragraph in change_section(found).paragraphs:
        print(paragraph)
    print("All changes: --json, or --into FOLDER.")
