"""What the page says to a sceptical reviewer: how wrong the estimates are where the truth is nearly known."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from wrackline.hydrology.quantile_regression import standard_error_percent
from wrackline.hydrology.records import BoolArray, FloatArray
from wrackline.hydrology.routes import covers
from wrackline.report.rounding import format_aep, format_percent
from wrackline.stages.gauge_floods import UsedGauges
from wrackline.study.config import StudyConfig
from wrackline.study.contribution import Figure, PageTable, Section

if TYPE_CHECKING:
    from wrackline.stages.validate import Validation

ROUTE_WORDS = {
    "growth_curve": "growth curve",
    "quantile_regression": "quantile regression",
    "routes_combined": "routes combined",
    "stream_transfer": "stream transfer",
}


def validation_section(config: StudyConfig, gauges: UsedGauges, found: Validation) -> Section:
    """Errors by route and probability, by size and region, and the coverage of intervals."""
    return Section(
        key="validation",
        title="Validation",
        paragraphs=tuple(_paragraphs(config, found)),
        figures=(
            Figure(
                "leave_one_out.png",
                "Every gauge estimated from all others by the adopted route, for a common and a rare flood.",
                "Two scatter plots of leave-one-out estimates against floods of the records.",
            ),
        ),
        tables=(_route_table(config, found), _group_table(config, gauges, found)),
        method=(
            "Leave-one-out of the whole chain: the gauge is taken out of the index-flood equation, the pool's growth curve and the quantile equations "
            "(closed form, model-error variances and the choice of law and attributes held). The record's flood that judges an estimate has a sampling error of its own, which the "
            "intervals allow for; errors in percent include it. Blocks are made by halving the region across its longer side; each is predicted from the others.",
        ),
    )


def _paragraphs(config: StudyConfig, found: Validation) -> list[str]:
    there = np.isfinite(found.observed).all(axis=1)
    told = [
        f"Each of {int(there.sum())} gauges was estimated as if it were ungauged and compared with its own record. "
        f"Adopted for all sites and probabilities: {ROUTE_WORDS[found.adopted]} ({found.reason})."
    ]
    combination = found.combination
    if combination is not None:
        settled = (
            "the weight is drawn towards one half accordingly"
            if 0 < combination.weight < 1
            else "the lesser route adds nothing sure and gets no weight"
        )
        told.append(
            f"Combined, the quantile regression has weight {combination.weight:.2f} and the growth curve {1 - combination.weight:.2f}, the same at all sites and probabilities "
            f"so that floods keep their order. The errors alone would give {combination.own_weight:.2f} with a standard error of {combination.own_se:.2f}; {settled}. "
            f"Errors of the two routes correlate by {combination.correlation.min():.2f} to {combination.correlation.max():.2f}."
        )
    for route, c in found.calibration.items():
        stated = format_percent(config.confidence)
        text = (
            f"Intervals of the route {ROUTE_WORDS[route]} that should hold {stated} held {format_percent(c.coverage)} (standard error "
            f"{format_percent(c.coverage_se, 2)}, blocks as units)"
        )
        if c.factor > 1:
            text += (
                f": too few. Standard errors of this route are multiplied by {c.factor:.2f}; with the factor fitted on the other blocks, "
                f"{format_percent(c.judged_coverage)} of each block was held."
            )
        else:
            text += "; they are used as they are."
        told.append(text)
    return told


def _percent_error(error: FloatArray) -> str:
    error = error[np.isfinite(error)]
    return format_percent(float(standard_error_percent((error**2).mean())) / 100) if len(error) else ""


def _route_table(config: StudyConfig, found: Validation) -> PageTable:
    rows = []
    for route, prediction in found.routes.items():
        there = prediction.available & np.isfinite(found.observed).all(axis=1)
        hit = covers(found.observed, found.observed_variance, prediction, config.confidence)
        for p, aep in enumerate(found.aeps):
            error = (prediction.log10_flow - found.observed)[there, p]
            by_block = (found.blocks[route] - found.observed)[there, p]
            rows.append(
                (
                    ROUTE_WORDS[route],
                    format_aep(float(aep)),
                    str(int(there.sum())),
                    _percent_error(error),
                    _percent_error(by_block),
                    f"{error.mean():+.3f}" if len(error) else "",
                    format_percent(float(hit[there, p].mean())) if there.any() else "",
                )
            )
    return PageTable(
        f"Errors where one gauge is left out, and where its whole block is; coverage of {config.confidence:.0%} intervals before calibration.",
        ("route", "AEP", "gauges", "error, one left out", "error, block left out", "bias, log10", "coverage"),
        tuple(rows),
        "tables/cross_validation.csv",
    )


def _groups(gauges: UsedGauges, there: BoolArray) -> list[tuple[str, BoolArray]]:
    area = gauges.sites["area_km2"].to_numpy(float)
    edges = np.quantile(area[there], [1 / 3, 2 / 3])
    size = np.digitize(area, edges)
    groups = [(f"{name} basins", there & (size == i)) for i, name in enumerate(("small", "middle", "large"))]
    region = gauges.sites["region"].to_numpy(dtype=object)
    groups += [(f"region {name}", there & (region == name)) for name in sorted(set(region)) if name]
    return [(name, rows) for name, rows in groups if rows.any()]


def _group_table(config: StudyConfig, gauges: UsedGauges, found: Validation) -> PageTable:
    prediction = (
        found.routes[found.adopted] if found.adopted in found.routes else next(iter(found.routes.values()))
    )
    there = prediction.available & np.isfinite(found.observed).all(axis=1)
    hit = covers(found.observed, found.observed_variance, prediction, config.confidence)
    shown = sorted({int(np.argmin(np.abs(np.log(found.aeps / aep)))) for aep in (0.5, 0.1, 0.01)})
    rows = []
    for name, members in _groups(gauges, there) if there.any() else []:
        for p in shown:
            error = (prediction.log10_flow - found.observed)[members, p]
            rows.append(
                (
                    name,
                    format_aep(float(found.aeps[p])),
                    str(int(members.sum())),
                    _percent_error(error),
                    f"{error.mean():+.3f}",
                    format_percent(float(hit[members, p].mean())),
                )
            )
    return PageTable(
        f"The adopted route by basin size (thirds) and region: leave-one-out error, bias and coverage of {config.confidence:.0%} intervals before calibration.",
        ("gauges of", "AEP", "number", "error", "bias, log10", "coverage"),
        tuple(rows),
        "tables/cross_validation.csv",
    )
