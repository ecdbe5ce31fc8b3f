"""Stage `regress`: the index flood, and the floods of every probability, as functions of catchment attributes."""

from __future__ import annotations

import json
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from wrackline.hydrology.attribute_choice import AttributeChoice, choose_attributes
from wrackline.hydrology.attributes import DesignPlan, describe_space
from wrackline.hydrology.index_flood import (
    IndexFloods,
    fit_index_regression,
    index_sampling_covariance,
    sample_index_floods,
)
from wrackline.hydrology.quantile_covariance import QuantileErrorModel, quantile_sampling_covariance
from wrackline.hydrology.quantile_regression import (
    QuantileRegression,
    RegionalSd,
    build_error_model,
    fit_quantile_regression,
    fit_regional_sd,
)
from wrackline.hydrology.records import BoolArray, FloatArray
from wrackline.hydrology.region_of_influence import InfluenceTrial, try_regions_of_influence
from wrackline.hydrology.regional_equations import (
    EquationDiagnostics,
    diagnose_equation,
    save_index_equation,
    save_quantile_equations,
)
from wrackline.report.figures_regress import draw_quantile_residuals, draw_regression
from wrackline.stages.gauge_floods import (
    GaugeFloods,
    UsedGauges,
    intercept_groups,
    pools_of_sites,
    read_gauge_floods,
    read_used_gauges,
)
from wrackline.stages.regress_page import index_section, regress_warnings
from wrackline.stages.regress_tables import (
    index_table,
    left_out_table,
    regression_table,
    subset_table,
)
from wrackline.stages.running import StudyFiles, main
from wrackline.stats.gls import GlsFit
from wrackline.stats.gls_leave_one_out import LeftOut, leave_one_out
from wrackline.stats.streams import random_stream
from wrackline.study.config import StudyConfig
from wrackline.study.contribution import Contribution, write_contribution
from wrackline.study.faults import FaultLog
from wrackline.study.handover import read_sites
from wrackline.study.tables import write_table
from wrackline.study.target_estimates import site_attributes

INFLUENCE_SIZES = (20, 30, 45, 60, 90)
"""Gauges tried in a region of influence."""


@dataclass(frozen=True)
class IndexEquation:
    """The index-flood regression and what surrounds it; g used gauges, n of them in the fit."""

    index: IndexFloods
    plan: DesignPlan
    design: FloatArray
    fit: GlsFit
    in_fit: BoolArray
    left_out: LeftOut
    diagnostics: EquationDiagnostics


@dataclass(frozen=True)
class QuantileEquations:
    """The quantile regressions and what surrounds them; g used gauges, n of them in the fit."""

    floods: GaugeFloods
    plan: DesignPlan
    design: FloatArray
    in_fit: BoolArray
    sd: RegionalSd
    errors: QuantileErrorModel
    regression: QuantileRegression
    diagnostics: tuple[EquationDiagnostics, ...]
    influence: tuple[InfluenceTrial, ...]


def run(study: StudyFiles) -> str:
    """Fit all regressions and write ``work/regress``."""
    config, faults = study.config, FaultLog()
    gauges = read_used_gauges(study)
    floods = read_gauge_floods(study, gauges)
    growth = json.loads((study.work("pool") / "growth.json").read_text(encoding="utf-8"))
    targets = read_sites(study.work("intake") / "targets.csv")
    pool = pools_of_sites(growth, gauges.gauge_ids)
    region = intercept_groups(growth, gauges.sites, pool)

    choice = search_attributes(config, gauges, floods, targets, region, faults)
    # Where no attribute earns a place, area stays: floods of different basins do not compare without it.
    attributes = config.regression.attributes or (choice.best.attributes if choice else ()) or ("area",)
    index = fit_index(config, gauges, growth, region, attributes, faults)
    quantiles = fit_quantiles(config, gauges, floods, region, attributes, faults)

    folder = study.work("regress")
    subsets = subset_table(choice, attributes)
    write_table(folder / "left_out.csv", left_out_table(gauges.gauge_ids, index, quantiles))
    model = describe_models(config, index, quantiles, choice)
    draw_regression(
        folder / "figures" / "index_flood.png",
        index_table(config, gauges, index, pool).frame,
        gauges.sites["area_km2"].to_numpy() / config.area_in_km2,
        config,
    )
    if quantiles:
        draw_quantile_residuals(
            folder / "figures" / "residual_map.png",
            gauges.sites[quantiles.in_fit],
            quantiles.regression.fits[rare_place(quantiles.floods.aeps)].residuals,
            float(quantiles.floods.aeps[rare_place(quantiles.floods.aeps)]),
        )
    tables = [index_table(config, gauges, index, pool), subsets]
    if quantiles:
        tables.append(regression_table(config, gauges, quantiles))
    write_contribution(
        folder,
        Contribution(
            stage="regress",
            tables=tuple(tables),
            sections=(index_section(config, gauges, index, quantiles, choice),),
            warnings=(*faults.warnings, *regress_warnings(gauges, index, quantiles)),
            models={"equations": model},
        ),
    )
    told = f"index flood of {int(index.in_fit.sum())} gauges on {', '.join(index.plan.columns)}"
    if quantiles:
        told += f"; floods of {len(quantiles.floods.aeps)} AEPs at {int(quantiles.in_fit.sum())} gauges on {', '.join(quantiles.plan.columns)}"
    return told


def relative_sd_of(growth: dict[str, Any], gauge_ids: list[str]) -> FloatArray:
    """Standard error of one year's worth of index flood over the index flood (g,), from every gauge's pool."""
    names = pools_of_sites(growth, gauge_ids)
    return np.array([growth["pools"][name]["index_relative_sd"] if name else np.nan for name in names])


def plan_design(config: StudyConfig, names: tuple[str, ...], regions: list[str], kind: str) -> DesignPlan:
    """Turn a list of attributes into design columns; ``kind`` as `regression.regions`."""
    known = tuple(sorted({name for name in regions if name})) if kind != "one" else ()
    transforms = tuple("log10" if name == "area" else config.attributes[name].transform for name in names)
    return DesignPlan(names, transforms, known, separate=kind == "separate")


def rare_place(aeps: FloatArray) -> int:
    """Place of AEP 0.01, or of the one nearest to it: what choices and figures go by."""
    return int(np.argmin(np.abs(np.log(np.asarray(aeps) / 0.01))))


def search_attributes(
    config: StudyConfig,
    gauges: UsedGauges,
    floods: GaugeFloods,
    targets: pd.DataFrame,
    region: list[str],
    faults: FaultLog,
) -> AttributeChoice | None:
    """Rank all subsets of the attributes that every gauge and target has; None with too few gauges."""
    names = ("area", *sorted(config.attributes))
    everything = plan_design(config, names, region, "one")
    at_gauges = everything.transformed(site_attributes(gauges.sites, everything))
    at_targets = everything.transformed(site_attributes(targets, everything))
    usable = floods.usable & np.array([bool(name) for name in region], dtype=bool)
    whole = np.isfinite(at_gauges[usable]).all(axis=0) & np.isfinite(at_targets).all(axis=0)
    missing = [name for name, there in zip(names, whole, strict=True) if not there]
    if missing:
        faults.warning(
            "attribute_not_tried", "regress",
            f"attributes with a missing or impossible value at a used gauge or target were not tried: {', '.join(missing)}",
            "Complete them, or leave them out of `attributes`.",
        )  # fmt: skip
    if usable.sum() < 12 or not whole.any():
        return None
    place = rare_place(floods.aeps)
    _, errors = describe_errors(gauges, floods, usable)
    kind = "one" if config.regression.regions == "one" else "intercepts"
    base = plan_design(config, (), region, kind).intercepts(
        [r for r, use in zip(region, usable, strict=True) if use]
    )
    chosen = [name for name, there in zip(names, whole, strict=True) if there]
    signs = ["positive" if name == "area" else config.attributes[name].sign for name in chosen]
    return choose_attributes(
        floods.log10_flow[usable, place],
        base,
        at_gauges[usable][:, whole],
        chosen,
        signs,
        quantile_sampling_covariance(errors, float(floods.aeps[place])),
        min(config.regression.largest_subset, int(usable.sum()) // 6),
        config.regression.largest_inflation,
        config.regression.model_variance,
    )


def describe_errors(
    gauges: UsedGauges, floods: GaugeFloods, used: BoolArray
) -> tuple[RegionalSd, QuantileErrorModel]:
    """What the sampling errors of the used gauges' floods depend on."""
    area = np.log10(gauges.sites["area_km2"].to_numpy()[used])
    between = np.ix_(used, used)
    sd = fit_regional_sd(floods.sd[used], area, floods.years[used])
    errors = build_error_model(
        sd.at(area),
        floods.generalized_skew[used],
        floods.generalized_covariance[between],
        floods.years[used],
        gauges.common_years[between],
        gauges.correlation[between],
    )
    return sd, errors


def fit_index(
    config: StudyConfig,
    gauges: UsedGauges,
    growth: dict[str, Any],
    region: list[str],
    attributes: tuple[str, ...],
    faults: FaultLog,
) -> IndexEquation:
    """Regress the index flood; too few gauges for the coefficients end the run."""
    index = sample_index_floods(
        gauges.records, relative_sd_of(growth, gauges.gauge_ids), config.index_flood.statistic
    )
    covariance = index_sampling_covariance(
        index.log10_variance,
        gauges.common_years,
        np.maximum(index.n, 1),
        gauges.correlation,
        config.index_flood.statistic,
    )
    names = config.index_flood.attributes or attributes
    kind = "intercepts" if config.index_flood.by_region else "one"
    plan = plan_design(config, names, region, kind)
    design = plan.design(site_attributes(gauges.sites, plan), region)
    if (index.usable & np.isfinite(design).all(axis=1)).sum() <= design.shape[1] + 1:
        faults.problem(
            "too_few_gauges_for_regression", "regress",
            f"the index-flood equation has {design.shape[1]} coefficients and too few gauges to fit them.",
            "Name fewer attributes in index_flood.attributes, or relax the screening.",
        )  # fmt: skip
        faults.stop_on_problems()
    refuse_dependent_columns(
        plan, design[index.usable & np.isfinite(design).all(axis=1)], "index_flood", faults
    )
    fit, in_fit = fit_index_regression(index, design, covariance, config.regression.model_variance)
    y, between = np.log10(index.flow[in_fit]), np.ix_(in_fit, in_fit)
    return IndexEquation(
        index, plan, design, fit, in_fit,
        leave_one_out(y, design[in_fit], covariance[between], fit),
        diagnose_equation(
            fit, y, covariance[between], gauges.distance[between],
            random_stream(config.seed, "regress", "index_flood"),
        ),
    )  # fmt: skip


def refuse_dependent_columns(plan: DesignPlan, design: FloatArray, part: str, faults: FaultLog) -> None:
    """End the run where a column is a combination of those before it, naming it; a constant attribute is one."""
    for i, column in enumerate(plan.columns):
        if np.linalg.matrix_rank(design[:, : i + 1]) <= i:
            faults.problem(
                "dependent_attributes",
                "regress",
                f"{column} is constant over the gauges or a combination of the columns before it: {', '.join(plan.columns[:i])}.",
                f"Name other attributes in {part}.attributes.",
            )
            break
    faults.stop_on_problems()


def fit_quantiles(
    config: StudyConfig,
    gauges: UsedGauges,
    floods: GaugeFloods,
    region: list[str],
    attributes: tuple[str, ...],
    faults: FaultLog,
) -> QuantileEquations | None:
    """Regress the floods of all probabilities; None, with a warning, where too few gauges have them."""
    plan = plan_design(config, attributes, region, config.regression.regions)
    design = plan.design(site_attributes(gauges.sites, plan), region)
    in_fit = floods.usable & np.isfinite(design).all(axis=1)
    if in_fit.sum() <= design.shape[1] + 3:
        faults.warning(
            "no_quantile_equations", "regress",
            f"{int(in_fit.sum())} gauges have floods for regression, too few for {design.shape[1]} coefficients: there are no quantile equations",
            "Name fewer attributes in regression.attributes, or relax the screening.",
        )  # fmt: skip
        return None
    refuse_dependent_columns(plan, design[in_fit], "regression", faults)
    sd, errors = describe_errors(gauges, floods, in_fit)
    y = floods.log10_flow[in_fit]
    regression = fit_quantile_regression(
        y, design[in_fit], errors, floods.aeps, config.regression.model_variance
    )
    between = np.ix_(in_fit, in_fit)
    diagnostics = tuple(
        diagnose_equation(
            fit, y[:, p], quantile_sampling_covariance(errors, float(aep)), gauges.distance[between],
            random_stream(config.seed, "regress", f"{aep:g}"),
        )
        for p, (aep, fit) in enumerate(zip(floods.aeps, regression.fits, strict=True))
    )  # fmt: skip
    place = rare_place(floods.aeps)
    influence: tuple[InfluenceTrial, ...] = ()
    if plan.names and not plan.regions:
        influence = try_regions_of_influence(
            y[:, place],
            design[in_fit],
            plan.transformed(site_attributes(gauges.sites, plan))[in_fit],
            quantile_sampling_covariance(errors, float(floods.aeps[place])),
            INFLUENCE_SIZES,
        )
    return QuantileEquations(floods, plan, design, in_fit, sd, errors, regression, diagnostics, influence)


def describe_models(
    config: StudyConfig,
    index: IndexEquation,
    quantiles: QuantileEquations | None,
    choice: AttributeChoice | None,
) -> dict[str, Any]:
    """The document ``equations.json``: all that is needed to apply the equations, units m3/s and km2."""
    space = describe_space(
        index.plan.names,
        index.design[index.in_fit][:, max(len(index.plan.regions), 1) :],
        index.fit.prediction_variance - index.fit.model_variance,
    )
    document: dict[str, Any] = {
        "units": {"flow": "m3/s", "area": "km2", "logarithm": "base 10"},
        "index_flood": save_index_equation(index.plan, index.fit, space).to_dict()
        | {
            "response": f"log10 of the {config.index_flood.statistic} annual flood",
            "statistic": config.index_flood.statistic,
            "model_variance_method": index.fit.method,
            "n_gauges": int(index.in_fit.sum()),
            "diagnostics": tell_diagnostics(index.diagnostics),
        },
        "evidence_chooses": list(choice.best.attributes) if choice else [],
    }
    if quantiles:
        regression = quantiles.regression
        place = rare_place(regression.aeps)
        saved = save_quantile_equations(
            quantiles.plan,
            regression,
            describe_space(
                quantiles.plan.names,
                pick_transformed(quantiles),
                regression.fits[place].prediction_variance - regression.fits[place].model_variance,
            ),
        )
        document["quantiles"] = saved.to_dict() | {
            "response": "log10 of the flood, weighted skew",
            "aeps": regression.aeps.tolist(),
            "model_variance_method": regression.fits[0].method,
            "n_gauges": int(quantiles.in_fit.sum()),
            "own_coefficients": [fit.coefficients.tolist() for fit in regression.fits],
            "regional_sd": {"constant": quantiles.sd.constant, "slope_log10_area_km2": quantiles.sd.slope},
            "diagnostics": [tell_diagnostics(one) for one in quantiles.diagnostics],
        }
    return document


def pick_transformed(quantiles: QuantileEquations) -> FloatArray:
    """Transformed attributes (n, a) of the gauges in the fit, whatever the design does with regions."""
    columns = quantiles.design[quantiles.in_fit]
    first, count = max(len(quantiles.plan.regions), 1), len(quantiles.plan.names)
    if not quantiles.plan.separate:
        return columns[:, first:]
    return columns[:, first:].reshape(len(columns), len(quantiles.plan.regions), count).sum(axis=1)


def tell_diagnostics(found: EquationDiagnostics) -> dict[str, Any]:
    """Diagnostics for a saved model; what is not finite is blank."""
    numbers = {
        "average_prediction_variance": found.average_prediction_variance,
        "model_error_percent": found.model_error_percent,
        "prediction_error_percent": found.prediction_error_percent,
        "pseudo_r2": found.pseudo_r2,
        "error_variance_ratio": found.error_variance_ratio,
        "largest_leverage": found.largest_leverage,
        "largest_influence": found.largest_influence,
        "moran_i": found.spatial.statistic,
        "moran_p": found.spatial.p_value,
    }
    return {name: value if np.isfinite(value) else None for name, value in numbers.items()}


if __name__ == "__main__":
    main("regress", run)
