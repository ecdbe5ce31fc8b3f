"""``wrackline estimate``: a finished study's saved models applied to new ungauged sites."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

if TYPE_CHECKING:
    import pandas as pd

    from wrackline.estimating import TargetEstimates


def estimate(
    results: Annotated[
        Path, typer.Argument(metavar="RESULTS", help="The results folder of a finished study.")
    ],
    targets: Annotated[
        Path, typer.Argument(metavar="TARGETS.csv", help="The new sites, columns as a study's targets.csv.")
    ],
    json: Annotated[bool, typer.Option("--json", help="Print every route, unrounded, as JSON.")] = False,
) -> None:
    """Estimate floods at new ungauged sites from the saved models of a study; nothing is run again.

    TARGETS.csv has the columns target_id,name,latitude,longitude,area, every attribute that the study's equations
    use, and region where the study has regions. Flows and areas are in the study's declared units.

    Exit status: 0 estimated (warnings allowed), 1 problems in the table, 2 a file cannot be read.

    Example: wrackline estimate my_region/results new_sites.csv
    """
    from wrackline.estimating import estimate as estimate_sites

    found = estimate_sites(results, targets)
    if json:
        from wrackline.study.contribution import to_json

        print(to_json(found.to_dict()), end="")
    else:
        _print_estimates(found)


def _print_estimates(found: TargetEstimates) -> None:
    from rich.box import SIMPLE_HEAD
    from rich.console import Console
    from rich.table import Table

    from wrackline.report.rounding import format_aep, format_flow, format_unit

    console = Console(highlight=False, markup=False, emoji=False)
    unit, adopted = format_unit(found.flow_unit), found.adopted
    console.print(
        f"Edition {found.edition} of the study; floods are medians in {unit}, with {found.confidence:.0%} intervals.",
        soft_wrap=True,
    )
    for target_id, rows in found.table.groupby("target_id", sort=True):
        own = adopted[adopted["target_id"] == target_id]
        if own.empty:
            console.print(f"{target_id}: no estimate. {rows['warnings'].iloc[0]}", soft_wrap=True)
            continue
        console.print(f"{target_id}: {str(own['route'].iloc[0]).replace('_', ' ')}", soft_wrap=True)
        table = Table(box=SIMPLE_HEAD)
        for head in ("AEP", f"flow, {unit}", "lower", "upper"):
            table.add_column(head, justify="right")
        for row in _rows(own):
            table.add_row(format_aep(row[0]), *(format_flow(value) for value in row[1:]))
        console.print(table)
        if own["warnings"].iloc[0]:
            console.print(f"Warning: {own['warnings'].iloc[0]}", style="yellow", soft_wrap=True)
    for warning in found.warnings:
        console.print(f"Warning: {warning}", style="yellow", soft_wrap=True)


def _rows(own: pd.DataFrame) -> list[list[float]]:
    rows: list[list[float]] = own[["aep", "flow", "lower", "upper"]].to_numpy(dtype=float).tolist()
    return rows
