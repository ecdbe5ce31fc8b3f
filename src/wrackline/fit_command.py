"""``wrackline fit``: one gauge's peaks to flood quantiles, as a short table or as JSON."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Literal

import typer

if TYPE_CHECKING:
    from wrackline.fitting import GaugeFit


def fit(
    file: Annotated[Path, typer.Argument(metavar="FILE.csv", help="The gauge's annual peaks.")],
    thresholds: Annotated[
        Path | None,
        typer.Option(metavar="FILE.csv", help="Perception thresholds: first_year,last_year,low,high."),
    ] = None,
    skew: Annotated[
        float | None, typer.Option(help="Generalized skew of the base-10 logarithms; needs --skew-mse.")
    ] = None,
    skew_mse: Annotated[
        float | None, typer.Option(min=0.0, help="Mean square error of the generalized skew.")
    ] = None,
    flow_unit: Annotated[
        Literal["m3/s", "ft3/s"], typer.Option(help="Unit of all flows, in and out.")
    ] = "m3/s",
    confidence: Annotated[
        float, typer.Option(help="Probability content of the limits, two-sided; 0.9: 5 % and 95 % bounds.")
    ] = 0.90,
    aep: Annotated[
        list[float] | None,
        typer.Option(help="An annual exceedance probability wanted, as a fraction; may be given again."),
    ] = None,
    low_flood_threshold: Annotated[
        float | None,
        typer.Option(
            min=0.0, help="Floods below it count as 'below it', instead of the low-flood test; needs --why."
        ),
    ] = None,
    why: Annotated[str, typer.Option(help="The reason for --low-flood-threshold.")] = "",
    plotting_position: Annotated[
        Literal["weibull", "cunnane", "gringorten", "hazen"], typer.Option(help="For the plotting positions.")
    ] = "weibull",
    water_year_starts: Annotated[
        int, typer.Option(min=1, max=12, help="First month of the water year; dates are checked against it.")
    ] = 10,
    expected_probability: Annotated[
        bool,
        typer.Option("--expected-probability", help="Add columns of expected probability; an extra."),
    ] = False,
    json: Annotated[bool, typer.Option("--json", help="Print everything, unrounded, as JSON.")] = False,
) -> None:
    """Fit log-Pearson III to the annual peaks of one gauge; no study needed.

    FILE.csv has the columns water_year,flow and may have date,low,high,kind,cause,flags as a study's peaks table
    has them. Flows are in the unit of --flow-unit, probabilities are fractions, logarithms of base 10. Without
    --skew the quantiles rest on the record alone.

    Exit status: 0 fitted (warnings allowed), 1 problems in the tables or a record that cannot be fitted, 2 a file
    cannot be read.

    Example: wrackline fit peaks.csv --flow-unit ft3/s --skew -0.3 --skew-mse 0.15
    """
    from wrackline.fitting import fit as fit_gauge
    from wrackline.hydrology.at_site import GAUGE_AEPS

    try:
        fitted = fit_gauge(
            file,
            thresholds,
            skew=skew,
            skew_mse=skew_mse,
            flow_unit=flow_unit,
            confidence=confidence,
            aeps=aep or GAUGE_AEPS,
            low_flood_threshold=low_flood_threshold,
            low_flood_reason=why,
            plotting_position=plotting_position,
            water_year_starts=water_year_starts,
        )
    except ValueError as error:
        raise typer.BadParameter(str(error)) from None
    if json:
        from wrackline.study.contribution import to_json

        print(to_json(fitted.to_dict()), end="")
    else:
        _print_fit(fitted, expected_probability)


def _print_fit(fitted: GaugeFit, expected_probability: bool) -> None:
    from rich.box import SIMPLE_HEAD
    from rich.console import Console
    from rich.table import Table

    from wrackline.report.rounding import format_aep, format_flow, format_percent, format_unit

    console = Console(highlight=False, markup=False, emoji=False)
    for line in _describe(fitted):
        console.print(line, soft_wrap=True)
    unit, share = format_unit(fitted.flow_unit), fitted.fits.confidence
    table = Table(box=SIMPLE_HEAD)
    lower, upper = format_percent(0.5 * (1 - share)), format_percent(0.5 * (1 + share))
    heads = ["AEP", f"flow, {unit}", f"{lower} bound", f"{upper} bound"]
    rows = [
        [format_aep(aep), *(format_flow(flow) for flow in flows)]
        for aep, *flows in fitted.quantiles()[["aep", "flow", "lower", "upper"]].to_numpy().tolist()
    ]
    if expected_probability:
        heads += ["expected probability of the flow", f"flow of expected probability, {unit}"]
        extras = fitted.expected_probability()[["expected_aep", "flow_expected"]].to_numpy().tolist()
        for cells, (expected, flow) in zip(rows, extras, strict=True):
            cells += [format_percent(expected), format_flow(flow)]
    for head in heads:
        table.add_column(head, justify="right")
    for cells in rows:
        table.add_row(*cells)
    console.print(table)
    if expected_probability:
        console.print(
            "Expected probability (normal case; Beard, 1960) is an extra beside the fitted curve.",
            soft_wrap=True,
        )
    for text in fitted.warnings():
        console.print(f"Warning: {text}", style="yellow", soft_wrap=True)


def _describe(fitted: GaugeFit) -> list[str]:
    """Say in a few lines what the fit rests on."""
    from wrackline.report.rounding import format_flow, format_unit

    told, fits = fitted.to_dict(), fitted.fits
    log10, low, unit = told["log10"], told["low_outliers"], format_unit(fitted.flow_unit)
    historic = f" and {told['n_historic']} historic" if told["n_historic"] else ""
    lines = [f"{told['n_peaks']} systematic{historic} peaks, {told['record_years']} years in the fit."]
    if low["set_by_analyst"]:
        lines.append(
            f"{_counted(low['count'], 'peak')} below the analyst's low-flood threshold of {format_flow(low['threshold'])} {unit}: {low['why']}."
        )
    elif low["count"]:
        lines.append(
            f"{_counted(low['count'], 'low flood')}, below {format_flow(low['threshold'])} {unit} (multiple Grubbs-Beck test)."
        )
    else:
        lines.append("No low floods (multiple Grubbs-Beck test).")
    if not fits.station.moments.refusal[0]:
        lines.append(
            f"Logarithms (base 10): mean {log10['mean']:.4f}, standard deviation {log10['sd']:.4f}, station skew "
            f"{log10['skew']:.3f} (mean square error {told['station_skew_mse']:.3f})."
        )
    if fitted.weighted:
        lines.append(
            f"Generalized skew {told['generalized_skew']:.3f} ({told['generalized_skew_mse']:.3f}), weighted skew "
            f"{told['weighted_skew']:.3f} ({told['weighted_skew_mse']:.3f})."
        )
    return lines


def _counted(number: int, noun: str) -> str:
    return f"{number} {noun}" if number == 1 else f"{number} {noun}s"
