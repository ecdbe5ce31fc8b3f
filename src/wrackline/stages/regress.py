"""Stage `regress`: the index flood as a function of catchment attributes."""

from __future__ import annotations

import json
from typing import Any

import numpy as np
import pandas as pd

from wrackline.hydrology.attributes import DesignPlan
from wrackline.hydrology.dependence import DistanceModel
from wrackline.hydrology.distances import great_circle_km
from wrackline.hydrology.index_flood import (
    LOG10_E,
    IndexFloods,
    count_common_years,
    fit_index_regression,
    index_sampling_covariance,
    sample_index_floods,
)
from wrackline.hydrology.records import BoolArray, FloatArray
from wrackline.report.figures_regress import draw_regression
from wrackline.report.rounding import format_flow, format_percent
from wrackline.stages.running import StudyFiles, main
from wrackline.stats.gls import GlsFit
from wrackline.study.config import StudyConfig
from wrackline.study.contribution import Contribution, Figure, PageTable, Section, write_contribution
from wrackline.study.faults import Fault, FaultLog
from wrackline.study.handover import read_records, read_sites
from wrackline.study.tables import Column, Table

FIT_COLUMNS = (
    Column("gauge_id", "text", "gauge"),
    Column("n_peaks", "count", "exact systematic peaks behind the index flood"),
    Column("index_flood", "flow", "sample index flood"),
    Column(
        "se_log10", "log10", "standard error of the log10 sample index flood, from the pool's growth curve"
    ),
    Column("regression", "flow", "index flood by the regression equation"),
    Column("residual_log10", "log10", "log10 of sample over regression"),
    Column("leverage", "", "weight of the gauge's own index flood in its regression estimate"),
    Column("in_fit", "true/false", "whether the gauge is in the regression"),
    Column("reason", "text", "why it is not"),
)


def run(study: StudyFiles) -> str:
    """Fit the index-flood regression and write ``work/regress``."""
    config = study.config
    sites = read_sites(study.work("intake") / "gauges.csv")
    screened = read_sites(study.work("screen") / "gauges.csv")
    used_ids = screened.loc[screened["used"], "gauge_id"]
    sites = sites[sites["gauge_id"].isin(used_ids)].reset_index(drop=True)
    records = read_records(study.work("screen") / "records.csv", sites["gauge_id"].tolist())
    pools = json.loads((study.work("pool") / "growth.json").read_text(encoding="utf-8"))["pools"]
    dependence = DistanceModel.from_dict(
        json.loads((study.work("dependence") / "model.json").read_text(encoding="utf-8"))
    )

    region = pool_of_gauges(pools, sites["gauge_id"].tolist())
    relative_sd = np.array([pools[name]["index_relative_sd"] if name else np.nan for name in region])
    index = sample_index_floods(records, relative_sd, config.index_flood.statistic)
    distance = great_circle_km(
        *(sites[f"centroid_{axis}"].to_numpy()[:, None] for axis in ("latitude", "longitude")),
        *(sites[f"centroid_{axis}"].to_numpy()[None, :] for axis in ("latitude", "longitude")),
    )
    covariance = index_sampling_covariance(
        index.log10_variance,
        count_common_years(records),
        np.maximum(index.n, 1),
        dependence.correlation(distance),
        config.index_flood.statistic,
    )
    plan = plan_regression(config, sorted({name for name in region if name}))
    design = plan.design(site_attributes(sites, plan), region)
    faults = FaultLog()
    if (index.usable & np.isfinite(design).all(axis=1)).sum() <= design.shape[1] + 1:
        faults.problem(
            "too_few_gauges_for_regression",
            "regress",
            f"the index-flood equation has {design.shape[1]} coefficients and too few gauges to fit them",
            "Name fewer attributes in index_flood.attributes, or relax the screening.",
        )
        faults.stop_on_problems()
    fit, in_fit = fit_index_regression(index, design, covariance)

    table = fit_table(config, sites, index, design, fit, in_fit, region)
    model = describe_equation(config, plan, fit, plan.transformed(site_attributes(sites, plan))[in_fit])
    figure = study.work("regress") / "figures" / "index_flood.png"
    draw_regression(
        figure, table[table["in_fit"]], sites.loc[in_fit, "area_km2"].to_numpy() / config.area_in_km2, config
    )
    write_contribution(
        study.work("regress"),
        Contribution(
            stage="regress",
            tables=(Table("index_floods", table, FIT_COLUMNS),),
            sections=(page_section(config, model, fit, table),),
            warnings=tuple(influence_warnings(table, fit)),
            models={"equations": {"index_flood": model}},
        ),
    )
    return f"index flood of {int(in_fit.sum())} gauges on {', '.join(plan.columns)}"


def pool_of_gauges(pools: dict[str, Any], gauge_ids: list[str]) -> list[str]:
    """Name the pool of every gauge; blank for a gauge in none."""
    home = {gauge_id: name for name in sorted(pools) for gauge_id in pools[name]["gauges"]}
    return [home.get(gauge_id, "") for gauge_id in gauge_ids]


def plan_regression(config: StudyConfig, regions: list[str]) -> DesignPlan:
    """Turn the configuration's attribute list into design columns."""
    names = config.index_flood.attributes
    return DesignPlan(
        names=names,
        transforms=tuple("log10" if name == "area" else config.attributes[name].transform for name in names),
        regions=tuple(regions) if config.index_flood.by_region else (),
    )


def site_attributes(sites: pd.DataFrame, plan: DesignPlan) -> dict[str, FloatArray]:
    """Pick the plan's attributes from a table of sites; area in km2."""
    return {name: sites["area_km2" if name == "area" else name].to_numpy(dtype=float) for name in plan.names}


def fit_table(
    config: StudyConfig,
    sites: pd.DataFrame,
    index: IndexFloods,
    design: FloatArray,
    fit: GlsFit,
    in_fit: BoolArray,
    region: list[str],
) -> pd.DataFrame:
    """A row per used gauge: sample, regression, residual, leverage."""
    regression = np.full(len(sites), np.nan)
    possible = np.isfinite(design).all(axis=1)
    regression[possible] = 10 ** fit.predict(design[possible])[0]
    leverage = np.full(len(sites), np.nan)
    leverage[in_fit] = fit.leverage
    residual = np.full(len(sites), np.nan)
    residual[in_fit] = fit.residuals
    reasons = np.where(
        in_fit,
        "",
        np.where(
            np.array([not name for name in region]),
            "in no pool, so its sampling error is unknown",
            np.where(
                index.usable,
                "an attribute has no value after its transformation",
                "its index flood is zero or missing",
            ),
        ),
    )
    return pd.DataFrame(
        {
            "gauge_id": sites["gauge_id"],
            "n_peaks": index.n,
            "index_flood": index.flow / config.flow_in_m3s,
            "se_log10": np.sqrt(index.log10_variance),
            "regression": regression / config.flow_in_m3s,
            "residual_log10": residual,
            "leverage": leverage,
            "in_fit": in_fit,
            "reason": reasons,
        }
    )


def describe_equation(
    config: StudyConfig, plan: DesignPlan, fit: GlsFit, transformed: FloatArray
) -> dict[str, Any]:
    """All that is needed to apply the equation to a new site; internal units m3/s and km2."""
    own_spread = fit.prediction_variance - fit.model_variance
    return {
        "response": f"log10 of the {config.index_flood.statistic} annual flood, m3/s",
        "statistic": config.index_flood.statistic,
        "attributes": list(plan.names),
        "transforms": list(plan.transforms),
        "regions": list(plan.regions),
        "columns": list(plan.columns),
        "coefficients": fit.coefficients.tolist(),
        "coefficient_covariance": fit.coefficient_covariance.tolist(),
        "model_variance": fit.model_variance,
        "model_variance_method": fit.method,
        "degrees_of_freedom": fit.degrees_of_freedom,
        "n_gauges": len(fit.fitted),
        "average_prediction_variance": float(fit.prediction_variance.mean()),
        "transformed_lower": transformed.min(axis=0).tolist(),
        "transformed_upper": transformed.max(axis=0).tolist(),
        "largest_spread": float(own_spread.max()),
        "area_unit": "km2",
        "flow_unit": "m3/s",
    }


def influence_warnings(table: pd.DataFrame, fit: GlsFit) -> list[Fault]:
    """Warn of gauges with more than three times the average leverage, and of residuals beyond three standard errors."""
    faults = FaultLog()
    n, k = len(fit.fitted), len(fit.coefficients)
    scale = np.sqrt(fit.model_variance + table["se_log10"] ** 2)
    for row in table[table["leverage"] > 3 * k / n].itertuples():
        faults.warning(
            "high_leverage",
            "regress",
            f"gauge {row.gauge_id} has leverage {row.leverage:.2f} in the index-flood regression, over three times the average of {k / n:.2f}",
            "Check its attributes: its flood steers the equation.",
        )
    for row in table[(table["residual_log10"].abs() > 3 * scale) & table["in_fit"]].itertuples():
        faults.warning(
            "large_residual",
            "regress",
            f"the index flood of gauge {row.gauge_id} is {10**row.residual_log10:.2f} times its regression estimate",
            "Check its area, attributes and units, and whether the gauge belongs to the study.",
        )
    return faults.warnings


def standard_error_percent(log10_variance: float) -> float:
    """Standard error in percent of a lognormal error with this log10 variance."""
    return float(100 * np.sqrt(np.expm1(log10_variance / LOG10_E**2)))


def page_section(config: StudyConfig, model: dict[str, Any], fit: GlsFit, table: pd.DataFrame) -> Section:
    """The page's words on the index flood."""
    error = np.sqrt(np.diag(fit.coefficient_covariance))
    left_out = int((~table["in_fit"]).sum())
    widest = table.loc[table["in_fit"], "residual_log10"].abs().idxmax()
    rows = tuple(
        (name, f"{b:.4f}", f"{se:.4f}", f"{b / se:.1f}")
        for name, b, se in zip(model["columns"], fit.coefficients, error, strict=True)
    )
    return Section(
        key="index_flood",
        title="Index flood",
        paragraphs=(
            f"The index flood is the {config.index_flood.statistic} of the annual floods. Its logarithm was regressed on "
            f"{', '.join(model['columns'][max(len(model['regions']), 1) :])} at {model['n_gauges']} gauges"
            + (
                f"; {left_out} used gauges could not take part (see the table of index floods)."
                if left_out
                else "."
            ),
            f"At a new site like these gauges the equation errs by {format_percent(standard_error_percent(model['average_prediction_variance']))} "
            f"(standard error of prediction), of which {format_percent(standard_error_percent(fit.model_variance))} is the equation's own "
            "lack of fit; sampling error of the gauges' floods is taken apart.",
            f"The largest residual is at gauge {table.loc[widest, 'gauge_id']}: a sample index flood of "
            f"{format_flow(table.loc[widest, 'index_flood'])} {config.units.flow} against "
            f"{format_flow(table.loc[widest, 'regression'])} {config.units.flow} from the equation.",
        ),
        figures=(
            Figure(
                "index_flood.png",
                "Left: sample index floods against the regression, with the line of equality and bars of two sampling standard errors. "
                "Right: residuals against area; a trend would mean that the equation bends.",
                "Two scatter plots of the index-flood regression: sample against regression, and residual against basin area.",
            ),
        ),
        tables=(
            PageTable(
                "Coefficients of log10 index flood (m3/s; area in km2).",
                ("term", "coefficient", "standard error", "ratio"),
                rows,
                "tables/equations.json",
            ),
        ),
        method=(
            "Generalized least squares with a known sampling covariance (Stedinger and Tasker, 1985), model-error variance by restricted "
            "maximum likelihood. Sampling variances come from the pool's growth curve, not from each gauge's own scatter; shared years "
            "correlate the sampling errors through the fitted distance model.",
        ),
    )


if __name__ == "__main__":
    main("regress", run)
