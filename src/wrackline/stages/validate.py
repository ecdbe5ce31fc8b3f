"""Stage `validate`: every gauge estimated as if it were ungauged; routes weighed, intervals judged."""

from __future__ import annotations

import json
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from wrackline.hydrology.index_flood import LOG10_E
from wrackline.hydrology.left_out_growth import left_out_growth_factors
from wrackline.hydrology.records import BoolArray, FloatArray, IntArray
from wrackline.hydrology.routes import (
    ROUTES,
    Calibration,
    Combination,
    RoutePredictions,
    calibrate_intervals,
    combine_routes,
    covers,
    fit_combination,
    out_of_block_error,
    pick_probabilities,
    split_by_space,
)
from wrackline.report.figures_validate import draw_validation
from wrackline.stages.blocks import predict_blocks
from wrackline.stages.gauge_floods import UsedGauges, all_aeps, pools_of_sites, read_used_gauges
from wrackline.stages.running import StudyFiles, main
from wrackline.stages.validate_page import validation_section
from wrackline.stats.lmoments import sample_lmoments
from wrackline.study.config import StudyConfig
from wrackline.study.contribution import Contribution, to_json, write_contribution
from wrackline.study.faults import FaultLog
from wrackline.study.tables import Column, Table, read_table, write_table, write_text

FEWEST_GAUGES = 10
"""Gauges with both routes that a combination is fitted to, at least."""
COLUMNS = (
    Column("gauge_id", "text", "gauge, estimated as if it were ungauged"),
    Column("aep", "fraction", "annual exceedance probability"),
    Column("route", "text", "how the estimate was made"),
    Column("observed", "flow", "flood from the gauge's own record, weighted skew"),
    Column("observed_se_log10", "log10", "its sampling standard error, from regional statistics"),
    Column("predicted", "flow", "estimate from all other gauges"),
    Column("predicted_se_log10", "log10", "its standard error of prediction, before any calibration"),
    Column("log10_error", "log10", "log10 of predicted over observed"),
    Column(
        "covered",
        "true/false",
        "whether the interval, allowing for the gauge's own variance, holds the observed",
    ),
)


@dataclass(frozen=True)
class Validation:
    """All gauges estimated without themselves; g used gauges, p probabilities of the targets.

    Attributes
    ----------
    aeps, all_aeps : (p,), (q,)
        Of the targets, which everything is judged by; of targets and gauges.
    observed, observed_variance : (g, p)
        log10 floods of the records and their sampling variances; NaN where a gauge is in no equation.
    routes, all_routes : by name, predictions without the gauge; for ``aeps`` and for ``all_aeps``
    blocks : by name, predictions without the gauge's whole block of neighbours, log10
    block : (g,)
    combination : Combination or None
    errors : by name, mean square error with weights from other blocks
    calibration : by name
    adopted, reason : the regional route that the study takes, and why
    """

    aeps: FloatArray
    all_aeps: FloatArray
    observed: FloatArray
    observed_variance: FloatArray
    routes: dict[str, RoutePredictions]
    all_routes: dict[str, RoutePredictions]
    blocks: dict[str, FloatArray]
    block: IntArray
    combination: Combination | None
    errors: dict[str, float]
    calibration: dict[str, Calibration]
    adopted: str
    reason: str


def run(study: StudyFiles) -> str:
    """Validate all regional routes and write ``work/validate``."""
    config, faults = study.config, FaultLog()
    gauges = read_used_gauges(study)
    found = validate(study, gauges)
    folder = study.work("validate")
    table = cross_validation_table(config, gauges, found)
    write_text(folder / "routes.json", to_json(describe_routes(found)))
    write_table(folder / "regional_left_out.csv", regional_left_out(gauges, found))
    for route, calibration in found.calibration.items():
        if calibration.factor > 1:
            faults.warning(
                "intervals_widened", "validate",
                f"leave-one-out intervals of route {route} held {calibration.coverage:.3f} of the gauges' floods instead of "
                f"{config.confidence:g}; they are widened by {calibration.factor:.2f} (judged on other blocks: {calibration.judged_coverage:.3f})",
            )  # fmt: skip
    draw_validation(folder / "figures" / "leave_one_out.png", table.frame, found.adopted, config)
    write_contribution(
        folder,
        Contribution(
            stage="validate",
            tables=(table,),
            sections=(validation_section(config, gauges, found),),
            warnings=tuple(faults.warnings),
        ),
    )
    shown = ", ".join(f"{route} {np.sqrt(error):.3f}" for route, error in found.errors.items())
    return f"leave-one-out errors, log10: {shown}; adopted {found.adopted}"


def validate(study: StudyFiles, gauges: UsedGauges) -> Validation:
    """Gather the left-out predictions of every route, combine them and judge them at the targets' probabilities."""
    config = study.config
    aeps = np.array(all_aeps(config))
    left_out = read_table(study.work("regress") / "left_out.csv")
    pools = json.loads((study.work("pool") / "growth.json").read_text(encoding="utf-8"))
    equations = json.loads((study.work("regress") / "tables" / "equations.json").read_text(encoding="utf-8"))
    latitude, longitude = (
        gauges.sites[f"centroid_{axis}"].to_numpy(float) for axis in ("latitude", "longitude")
    )
    block = split_by_space(latitude, longitude)

    observed, observed_variance, quantile = quantile_predictions(gauges, left_out, equations, aeps)
    growth = growth_predictions(gauges, left_out, equations, pools, aeps)
    routes = {"growth_curve": growth}
    if quantile is None:
        observed, observed_variance = index_times_growth(gauges, left_out, growth)
    else:
        routes["quantile_regression"] = quantile
    judged = np.isin(aeps, config.aeps.targets)
    blocks = predict_blocks(study, gauges, equations, pools, block, aeps[judged])
    combination = None
    errors = {
        name: _square_error(observed[:, judged], pick_probabilities(route, judged))
        for name, route in routes.items()
    }
    if quantile is not None:
        both = growth.available & quantile.available & np.isfinite(observed).all(axis=1)
        if both.sum() >= FEWEST_GAUGES:
            combination = fit_combination(observed, growth, quantile, judged)
            routes["routes_combined"] = combine_routes(combination, growth, quantile)
            errors = out_of_block_error(
                observed[:, judged],
                pick_probabilities(growth, judged),
                pick_probabilities(quantile, judged),
                block,
            )
            w = combination.weight
            blocks["routes_combined"] = (1 - w) * blocks["growth_curve"] + w * blocks["quantile_regression"]
    adopted, reason = adopt_route(config, errors)
    shown = {name: pick_probabilities(route, judged) for name, route in routes.items()}
    calibration = {
        name: calibrate_intervals(
            observed[:, judged], observed_variance[:, judged], route, block, config.confidence
        )
        for name, route in shown.items()
        if (route.available & np.isfinite(observed).all(axis=1)).sum() >= FEWEST_GAUGES
    }
    return Validation(
        aeps=aeps[judged],
        all_aeps=aeps,
        observed=observed[:, judged],
        observed_variance=observed_variance[:, judged],
        routes=shown,
        all_routes=routes,
        blocks=blocks,
        block=block,
        combination=combination,
        errors=errors,
        calibration=calibration,
        adopted=adopted,
        reason=reason,
    )


def _square_error(observed: FloatArray, route: RoutePredictions) -> float:
    there = route.available & np.isfinite(observed).all(axis=1)
    return float(((route.log10_flow - observed)[there] ** 2).mean()) if there.any() else float("nan")


def adopt_route(config: StudyConfig, errors: dict[str, float]) -> tuple[str, str]:
    """Name the regional route for all sites and probabilities, and the reason."""
    for pin in config.regression.adopt:
        if not pin.target_id and pin.route in ROUTES:
            return pin.route, f"fixed by the analyst: {pin.why}"
    finite = {route: error for route, error in errors.items() if np.isfinite(error)}
    if not finite:
        return "growth_curve", "the only route with estimates"
    best = min(finite, key=lambda route: finite[route])
    if len(finite) == 1:
        return best, "the only route with leave-one-out estimates"
    return (
        best,
        "the smallest leave-one-out error over all gauges and probabilities, weights fitted on other blocks",
    )


def quantile_predictions(
    gauges: UsedGauges, left_out: pd.DataFrame, equations: dict[str, Any], aeps: FloatArray
) -> tuple[FloatArray, FloatArray, RoutePredictions | None]:
    """Observed floods, their variances and the quantile route's predictions, (g, p) each."""
    if "quantiles" not in equations:
        none = np.full((len(gauges.gauge_ids), len(aeps)), np.nan)
        return none, none.copy(), None
    rows = left_out[left_out["aep"].notna()].set_index(["gauge_id", "aep"])
    index = pd.MultiIndex.from_product([gauges.gauge_ids, aeps.tolist()])
    shape = (len(gauges.gauge_ids), len(aeps))
    columns = {name: rows[name].reindex(index).to_numpy(float).reshape(shape) for name in rows.columns}
    route = RoutePredictions(
        columns["predicted"], columns["predicted_variance"], int(equations["quantiles"]["degrees_of_freedom"])
    )
    return columns["observed"], columns["observed_variance"], route


def growth_predictions(
    gauges: UsedGauges,
    left_out: pd.DataFrame,
    equations: dict[str, Any],
    growth: dict[str, Any],
    aeps: FloatArray,
) -> RoutePredictions:
    """Index flood without the gauge times the growth curve of its pool without the gauge."""
    rows = left_out[left_out["aep"].isna()].set_index("gauge_id").reindex(gauges.gauge_ids)
    factors, ln_sd = growth_without(gauges, growth, aeps, np.arange(len(gauges.gauge_ids)))
    index, variance = (rows[name].to_numpy(float)[:, None] for name in ("predicted", "predicted_variance"))
    return RoutePredictions(
        index + np.log10(factors),
        variance + (LOG10_E * ln_sd) ** 2,
        int(equations["index_flood"]["degrees_of_freedom"]),
    )


def growth_without(
    gauges: UsedGauges, growth: dict[str, Any], aeps: FloatArray, group: IntArray
) -> tuple[FloatArray, FloatArray]:
    """Growth factors at every gauge from its pool without the gauge's group, and the ln sd at a new site, (g, p)."""
    exact = gauges.records.keep_rows(gauges.records.systematic_exact)
    with np.errstate(invalid="ignore", divide="ignore"):
        lm = sample_lmoments(exact.flow_low, exact.offsets)
    ratios = np.column_stack([lm.t, lm.t3, lm.t4, lm.t5])
    place = {gauge: i for i, gauge in enumerate(gauges.gauge_ids)}
    home = np.array(pools_of_sites(growth, gauges.gauge_ids), dtype=object)
    factors = np.full((len(place), len(aeps)), np.nan)
    ln_sd = np.full_like(factors, np.nan)
    for name, pool in growth["pools"].items():
        sites = np.flatnonzero(home == name)
        if not len(sites):
            continue
        named = [gauge for gauge in pool["gauges"] if gauge in place]
        members = np.array([place[gauge] for gauge in named], dtype=np.int64)
        weight = np.array([pool["gauges"][gauge] for gauge in named])
        of_lskew = pool.get("gauges_lskew", pool["gauges"])
        weight_lskew = np.array([of_lskew.get(gauge, 0.0) for gauge in named])
        same = group[sites][:, None] == group[members][None, :]
        factors[sites] = left_out_growth_factors(
            pool["distribution"],
            ratios[members],
            weight,
            same.astype(float),
            aeps,
            growth["statistic"],
            weight_lskew,
        )
        at = [pool["aeps"].index(aep) for aep in aeps.tolist()]
        ln_sd[sites] = np.array(pool["ln_sd_new_site"])[at]
    return factors, ln_sd


def index_times_growth(
    gauges: UsedGauges, left_out: pd.DataFrame, growth: RoutePredictions
) -> tuple[FloatArray, FloatArray]:
    """Where no fits at gauges are in equations: judge the index flood alone, at the first probability."""
    rows = left_out[left_out["aep"].isna()].set_index("gauge_id").reindex(gauges.gauge_ids)
    missing = rows["predicted"].to_numpy(float) - rows["observed"].to_numpy(float)
    observed = growth.log10_flow - missing[:, None]
    return observed, np.broadcast_to(
        rows["observed_variance"].to_numpy(float)[:, None], observed.shape
    ).copy()


def cross_validation_table(config: StudyConfig, gauges: UsedGauges, found: Validation) -> Table:
    """A row per gauge, probability and route."""
    frames = []
    ids = np.array(gauges.gauge_ids, dtype=object)
    for name, route in found.routes.items():
        there = route.available & np.isfinite(found.observed).all(axis=1)
        hit = covers(found.observed, found.observed_variance, route, config.confidence)
        n, p = int(there.sum()), len(found.aeps)
        frames.append(
            pd.DataFrame(
                {
                    "gauge_id": np.repeat(ids[there], p),
                    "aep": np.tile(found.aeps, n),
                    "route": name,
                    "observed": _flow(found.observed, there, config),
                    "observed_se_log10": np.sqrt(found.observed_variance[there]).ravel(),
                    "predicted": _flow(route.log10_flow, there, config),
                    "predicted_se_log10": np.sqrt(route.variance[there]).ravel(),
                    "log10_error": (route.log10_flow - found.observed)[there].ravel(),
                    "covered": hit[there].ravel(),
                }
            )
        )
    frame = pd.concat(frames, ignore_index=True).sort_values(
        ["gauge_id", "aep", "route"], ascending=[True, False, True], kind="stable", ignore_index=True
    )
    return Table("cross_validation", frame, COLUMNS)


def _flow(log10_flow: FloatArray, rows: BoolArray, config: StudyConfig) -> FloatArray:
    return np.asarray(10 ** log10_flow[rows].ravel() / config.flow_in_m3s)


def regional_left_out(gauges: UsedGauges, found: Validation) -> pd.DataFrame:
    """For the estimates at gauges: every regional route without the gauge, variances calibrated, log10 of m3/s."""
    frames = []
    ids, p = np.array(gauges.gauge_ids, dtype=object), len(found.all_aeps)
    for name, route in found.all_routes.items():
        there = route.available
        factor = found.calibration[name].factor if name in found.calibration else 1.0
        frames.append(
            pd.DataFrame(
                {
                    "gauge_id": np.repeat(ids[there], p),
                    "aep": np.tile(found.all_aeps, int(there.sum())),
                    "route": name,
                    "log10_flow": route.log10_flow[there].ravel(),
                    "variance": factor**2 * route.variance[there].ravel(),
                    "degrees_of_freedom": route.degrees_of_freedom,
                }
            )
        )
    return pd.concat(frames, ignore_index=True)


def describe_routes(found: Validation) -> dict[str, Any]:
    """What the estimates need of the validation."""
    combination = found.combination
    return {
        "aeps": found.all_aeps.tolist(),
        "adopted": found.adopted,
        "reason": found.reason,
        "combination": None
        if combination is None
        else {
            "weight_quantile_regression": combination.weight,
            "own_weight": combination.own_weight,
            "own_weight_se": combination.own_se,
            "correlation": combination.correlation.tolist(),
        },
        "mean_square_errors": {route: e for route, e in found.errors.items() if np.isfinite(e)},
        "calibration": {
            route: {
                "coverage": c.coverage,
                "coverage_se": c.coverage_se,
                "factor": c.factor,
                "judged_coverage": c.judged_coverage,
            }
            for route, c in found.calibration.items()
        },
    }


if __name__ == "__main__":
    main("validate", run)
