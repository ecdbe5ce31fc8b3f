"""Floods at ungauged sites from a study's saved models: the same numbers in the study and years later."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pandas as pd

from wrackline.hydrology.attributes import DesignPlan
from wrackline.hydrology.records import FloatArray
from wrackline.hydrology.regional_equations import SavedEquations
from wrackline.hydrology.routes import RoutePredictions
from wrackline.hydrology.stream_transfer import StreamGauge, transfer_along_stream
from wrackline.hydrology.ungauged import (
    estimate_regional,
    growth_at,
    pick_equations,
    read_combination,
    scale_growth_curve,
    state_intervals,
)
from wrackline.study.config import StudyConfig
from wrackline.study.tables import Column

ROUTE_ORDER = ("growth_curve", "quantile_regression", "routes_combined", "stream_transfer")
TARGET_COLUMNS = (
    Column("target_id", "text", "ungauged site"),
    Column("aep", "fraction", "annual exceedance probability"),
    Column("route", "text", "how the estimate was made"),
    Column("flow", "flow", "estimated flood: the median of its predictive distribution"),
    Column("lower", "flow", "lower end of the interval"),
    Column("upper", "flow", "upper end of the interval"),
    Column("se_log10", "log10", "standard error of prediction of log10 flow"),
    Column("adopted", "true/false", "whether this route is the study's answer for the site"),
    Column("warnings", "text", "what to know before use"),
)


@dataclass
class _Notes:
    """What to know of every site, and of its routes."""

    site: list[list[str]]
    route: dict[tuple[int, str], list[str]] = field(default_factory=dict)

    def text(self, at: int, route: str) -> str:
        return "; ".join([*self.site[at], *self.route.get((at, route), [])])


def pools_of_targets(models: dict[str, Any], targets: pd.DataFrame) -> tuple[list[str], list[list[str]]]:
    """Name every target's pool (blank: none), and say where it is borrowed.

    Where pools are regions the site's region says. Otherwise the study's own targets have theirs, and a new site takes the
    pool of the gauge most like it in the index equation's attributes.
    """
    pools = models["growth"]
    if models["pooling_method"] == "regions":
        return [name if name in pools else "" for name in targets["region"]], [[] for _ in targets["region"]]
    plan = SavedEquations.from_dict(models["index_flood"]).plan
    places = plan.transformed(site_attributes(targets, plan))
    known = {gauge: one for gauge, one in models["gauges"].items() if one["pool"]}
    at_gauges = np.array([one["place"] for one in known.values()], dtype=float).reshape(len(known), -1)
    scale = np.maximum(at_gauges.std(axis=0), 1e-12) if len(known) else 1.0
    names: list[str] = []
    notes: list[list[str]] = []
    for target, place in zip(targets["target_id"], places, strict=True):
        own = models["home"].get(target)
        if own is not None or not len(known) or not np.isfinite(place).all():
            names.append(own if own in pools else "")
            notes.append([])
            continue
        nearest = list(known)[int((((at_gauges - place) / scale) ** 2).sum(axis=1).argmin())]
        names.append(known[nearest]["pool"])
        notes.append([f"its growth curve is that of gauge {nearest}, the gauge most like it"])
    return names, notes


def site_attributes(sites: pd.DataFrame, plan: DesignPlan) -> dict[str, FloatArray]:
    """Pick the plan's attributes from a table of sites; area in km2, an absent attribute is missing."""
    columns = {name: "area_km2" if name == "area" else name for name in plan.names}
    return {
        name: sites[column].to_numpy(dtype=float) if column in sites else np.full(len(sites), np.nan)
        for name, column in columns.items()
    }


def estimate_targets(config: StudyConfig, models: dict[str, Any], targets: pd.DataFrame) -> pd.DataFrame:
    """Estimate targets by every route; one row per target, route and probability, flows in the declared unit.

    Parameters
    ----------
    config : StudyConfig
        Units, confidence, targets' probabilities, adopted routes.
    models : dict
        ``index_flood``, ``quantiles`` or None, ``growth``, ``routes``, ``gauges``, ``adopt``: see `describe_models`.
    targets : table
        As intake checks it: SI units, sorted.
    """
    aeps = np.array(config.aeps.targets, dtype=float)
    pool, borrowed = pools_of_targets(models, targets)
    routes, notes = _regional_routes(config, models, targets, pool, aeps)
    notes.site = [a + b for a, b in zip(notes.site, borrowed, strict=True)]
    transfers = _transfers(config, models, targets, routes, aeps)
    adopted = [
        _adopt(config, models, target, i, routes, transfers, notes)
        for i, target in enumerate(targets["target_id"])
    ]
    if any(one is not None for one in transfers):
        routes["stream_transfer"] = _stack(transfers, len(aeps))
    return _rows(config, models, targets, routes, adopted, notes, aeps)


def _regional_routes(
    config: StudyConfig, models: dict[str, Any], targets: pd.DataFrame, pool: list[str], aeps: FloatArray
) -> tuple[dict[str, RoutePredictions], _Notes]:
    index = SavedEquations.from_dict(models["index_flood"])
    group = pool if models["pooling_method"] == "regions" else targets["region"].tolist()
    design, notes = _place(index, targets, group)
    log10_index, variance = index.predict(design)
    growth, growth_sd = growth_at(aeps, models["growth"], pool)
    by_growth = scale_growth_curve(
        log10_index[:, 0], variance[:, 0], index.degrees_of_freedom, growth, growth_sd
    )
    quantile = None
    if models["quantiles"] is not None:
        equations = pick_equations(models["quantiles"], aeps)
        design, more = _place(equations, targets, group)
        notes = [list(dict.fromkeys(a + b)) for a, b in zip(notes, more, strict=True)]
        quantile = RoutePredictions(*equations.predict(design), equations.degrees_of_freedom)
    found = _Notes(notes)
    for i, name in enumerate(pool):
        of_pool = _note_pool(name, models["growth"], min(config.aeps.targets))
        if not name:
            notes[i][:0] = of_pool
        elif of_pool:
            found.route[i, "growth_curve"], found.route[i, "routes_combined"] = of_pool, list(of_pool)
    routes = estimate_regional(by_growth, quantile, read_combination(models["routes"], aeps))
    return routes, found


def _place(
    equations: SavedEquations, targets: pd.DataFrame, group: list[str]
) -> tuple[FloatArray, list[list[str]]]:
    """Design rows of the targets, and what to know of their attributes."""
    attributes = site_attributes(targets, equations.plan)
    transformed = equations.plan.transformed(attributes)
    design = equations.plan.design(attributes, group)
    notes = equations.notes(transformed, design)
    for i in np.flatnonzero(~np.isfinite(transformed).all(axis=1)):
        lacking = [n for n, v in zip(equations.plan.names, transformed[i], strict=True) if not np.isfinite(v)]
        notes[i] = [f"no value of {', '.join(lacking)}"]
    return design, notes


def _note_pool(name: str, pools: dict[str, Any], rarest: float) -> list[str]:
    """What to know of a site's pool before its growth curve is used."""
    if not name:
        return ["the site is in no pool, so it has no growth curve"]
    notes = [f"pool {name} is heterogeneous"] if pools[name]["heterogeneous"] else []
    if pools[name]["station_years"] < 1.0 / rarest:
        notes.append(
            f"pool {name} has {pools[name]['station_years']} station-years, fewer than 1/AEP of the rarest floods"
        )
    return notes


def _regional_choice(models: dict[str, Any], routes: dict[str, RoutePredictions], at: int) -> str | None:
    """The regional route adopted for all, or the first that has an estimate at this site."""
    wanted = models["routes"]["adopted"]
    order = [wanted, *(route for route in ROUTE_ORDER if route != wanted)]
    return next((route for route in order if route in routes and routes[route].available[at]), None)


def _transfers(
    config: StudyConfig,
    models: dict[str, Any],
    targets: pd.DataFrame,
    routes: dict[str, RoutePredictions],
    aeps: FloatArray,
) -> list[RoutePredictions | None]:
    """Estimates from gauges on the targets' own streams, on top of the adopted regional route."""
    known = models["gauges"]
    found: list[RoutePredictions | None] = []
    for at, (area, *names) in enumerate(
        targets[["area_km2", "upstream_gauge", "downstream_gauge"]].itertuples(index=False)
    ):
        route = _regional_choice(models, routes, at)
        gauges = [known[name] for name in names if name in known] if route else []
        gauges = [gauge for gauge in gauges if route in gauge["regional"]]
        if not gauges or route is None:
            found.append(None)
            continue
        base = routes[route]
        factor = calibration_factor(models, route)
        found.append(
            transfer_along_stream(
                float(area),
                base.log10_flow[at],
                factor**2 * base.variance[at],
                [_stream_gauge(gauge, route, aeps) for gauge in gauges],
                base.degrees_of_freedom,
                config.regression.transfer_area_ratio,
            )
        )
    return found


def _stream_gauge(gauge: dict[str, Any], route: str, aeps: FloatArray) -> StreamGauge:
    at = [gauge["aeps"].index(aep) for aep in aeps.tolist()]
    flow, variance, regional = (
        np.array(values, dtype=float)[at]
        for values in (gauge["log10_flow"], gauge["variance"], gauge["regional"][route])
    )
    return StreamGauge(float(gauge["area_km2"]), flow, variance, regional)


def calibration_factor(models: dict[str, Any], route: str) -> float:
    """What the validation multiplies the standard errors of a route by."""
    return float(models["routes"]["calibration"].get(route, {}).get("factor", 1.0))


def _adopt(
    config: StudyConfig,
    models: dict[str, Any],
    target_id: str,
    at: int,
    routes: dict[str, RoutePredictions],
    transfers: list[RoutePredictions | None],
    notes: _Notes,
) -> str | None:
    """The one route adopted for a site: the analyst's, or the stream's where it is surer, or the region's."""
    regional = _regional_choice(models, routes, at)
    transfer = transfers[at]
    for pin in models["adopt"]:
        if pin["target_id"] not in ("", target_id):
            continue
        there = (
            transfer is not None
            if pin["route"] == "stream_transfer"
            else pin["route"] in routes and bool(routes[pin["route"]].available[at])
        )
        if there:
            notes.route.setdefault((at, pin["route"]), []).append(f"adopted by the analyst: {pin['why']}")
            return str(pin["route"])
        if pin["target_id"]:
            notes.site[at].append(f"the analyst's route {pin['route']} has no estimate here")
    if regional is None:
        notes.site[at].insert(0, "no estimate")
        return None
    if transfer is not None:
        base = calibration_factor(models, regional) ** 2 * routes[regional].variance[at]
        if transfer.variance[0].mean() < base.mean():
            return "stream_transfer"
    if regional != models["routes"]["adopted"]:
        notes.site[at].append(f"the study's route {models['routes']['adopted']} has no estimate here")
    return regional


def _stack(transfers: list[RoutePredictions | None], p: int) -> RoutePredictions:
    flow, variance = np.full((len(transfers), p), np.nan), np.full((len(transfers), p), np.nan)
    freedom = 1
    for i, one in enumerate(transfers):
        if one is not None:
            flow[i], variance[i], freedom = one.log10_flow[0], one.variance[0], one.degrees_of_freedom
    return RoutePredictions(flow, variance, freedom)


def _rows(
    config: StudyConfig,
    models: dict[str, Any],
    targets: pd.DataFrame,
    routes: dict[str, RoutePredictions],
    adopted: list[str | None],
    notes: _Notes,
    aeps: FloatArray,
) -> pd.DataFrame:
    """The published rows; a site without any estimate keeps one blank set of rows with the reason."""
    stated = {}
    for route in ROUTE_ORDER:
        if route in routes:
            factor = 1.0 if route == "stream_transfer" else calibration_factor(models, route)
            stated[route] = state_intervals(routes[route], config.confidence, factor)
    rows: list[tuple[Any, ...]] = []
    for i, target_id in enumerate(targets["target_id"]):
        there = [route for route in stated if routes[route].available[i]]
        for route in there:
            one = stated[route]
            if one.reordered[i]:
                notes.route.setdefault((i, route), []).append(
                    "floods of neighbouring AEPs crossed and were put in order"
                )
            for p, aep in enumerate(aeps.tolist()):
                rows.append(
                    (
                        target_id,
                        aep,
                        route,
                        float(one.flow[i, p]) / config.flow_in_m3s,
                        float(one.lower[i, p]) / config.flow_in_m3s,
                        float(one.upper[i, p]) / config.flow_in_m3s,
                        float(one.se_log10[i, p]),
                        route == adopted[i],
                        notes.text(i, route),
                    )
                )
        if not there:
            blank = (np.nan,) * 4
            rows += [
                (target_id, aep, "growth_curve", *blank, False, notes.text(i, "growth_curve"))
                for aep in aeps.tolist()
            ]
    return pd.DataFrame(rows, columns=[column.name for column in TARGET_COLUMNS])
