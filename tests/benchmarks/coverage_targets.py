"""Do the intervals at ungauged sites cover the truth? Regenerates regions whose floods are known.

    python tests/benchmarks/coverage_targets.py --regions 50

Each region is drawn by the example's generator, or by its misspecified twin (parents outside the candidate
distributions, a curved attribute relation, uneven heterogeneity), and taken through the regional analysis in
one process: pools, generalized skew, both regressions, leave-one-out, weights of the routes, transfer along streams. Printed by
route, AEP and basin size: coverage of the intervals, its standard error (regions, not sites, are the independent
units) and the mean interval score over that of intervals of the same estimates whose width comes from the
true error variance; then the routes' scores against each other.
"""

from __future__ import annotations

import argparse
import sys
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
from scipy.special import ndtri

sys.path.insert(0, str(Path(__file__).parents[2]))

from example_region.region import generate_region
from wrackline.hydrology.at_site import fit_records
from wrackline.hydrology.attributes import DesignPlan
from wrackline.hydrology.dependence import fit_dependence
from wrackline.hydrology.distances import great_circle_km
from wrackline.hydrology.generalized_skew import (
    fit_skew_model,
    generalized_skew_error_covariance,
    prepare_station_skews,
)
from wrackline.hydrology.index_flood import (
    LOG10_E,
    count_common_years,
    fit_index_regression,
    index_sampling_covariance,
    sample_index_floods,
)
from wrackline.hydrology.left_out_growth import left_out_growth_factors
from wrackline.hydrology.pools import PoolSettings, analyse_pool
from wrackline.hydrology.quantile_regression import (
    build_error_model,
    fit_quantile_regression,
    fit_regional_sd,
)
from wrackline.hydrology.records import PeakRecords
from wrackline.hydrology.routes import (
    RoutePredictions,
    calibrate_intervals,
    combine_routes,
    fit_combination,
    out_of_block_error,
    split_by_space,
    weigh_with_record,
)
from wrackline.hydrology.stream_transfer import StreamGauge, transfer_along_stream
from wrackline.hydrology.ungauged import scale_growth_curve, state_intervals
from wrackline.stats.gls_leave_one_out import leave_one_out
from wrackline.stats.lmoments import sample_lmoments
from wrackline.stats.streams import random_stream

AEPS = (0.5, 0.2, 0.1, 0.04, 0.02, 0.01, 0.005, 0.002)
SHOWN = (0.5, 0.1, 0.01)
ROUTES = ("growth_curve", "quantile_regression", "routes_combined", "adopted", "stream_transfer")
CONFIDENCE = 0.90
PLAN = DesignPlan(("area_km2", "precipitation"), ("log10", "log10"))


@dataclass(frozen=True)
class Trial:
    """One region's targets by one route: arrays (targets, AEPs) of log10 flows, NaN where the route has none."""

    truth: np.ndarray
    estimate: np.ndarray
    lower: np.ndarray
    upper: np.ndarray
    area: np.ndarray


@dataclass(frozen=True)
class Growth:
    """Growth factors and the ln standard deviation of their errors, at targets and at gauges without themselves."""

    factor: np.ndarray
    ln_sd: np.ndarray
    left_out: np.ndarray
    left_out_ln_sd: np.ndarray
    relative_sd: np.ndarray


def run_trial(job: tuple[int, str]) -> dict[str, Trial]:
    """Draw a region and estimate its targets by every route."""
    seed, kind = job
    region = generate_region(seed, kind, awkward=False)
    gauges, targets, records = region.gauges, region.targets, region.records
    latitude, longitude = gauges["centroid_latitude"].to_numpy(), gauges["centroid_longitude"].to_numpy()
    dependence = fit_dependence(records, latitude, longitude).model
    distance = great_circle_km(latitude[:, None], longitude[:, None], latitude, longitude)
    correlation = dependence.correlation(distance)
    np.fill_diagonal(correlation, 1.0)
    common = count_common_years(records)
    growth = pool_regions(seed, gauges, targets, records, correlation)

    index = sample_index_floods(records, growth.relative_sd)
    covariance = index_sampling_covariance(index.log10_variance, common, np.maximum(index.n, 1), correlation)
    design = PLAN.design(gauges, gauges["region"])
    index_fit, used = fit_index_regression(index, design, covariance)
    assert used.all()
    without = leave_one_out(np.log10(index.flow), design, covariance, index_fit)
    log10_flow, log10_se, quantiles = regress_quantiles(gauges, records, design, correlation, common)

    at_gauges = {
        "growth_curve": RoutePredictions(
            without.predicted[:, None] + np.log10(growth.left_out),
            without.variance[:, None] + (LOG10_E * growth.left_out_ln_sd) ** 2,
            index_fit.degrees_of_freedom,
        ),
        "quantile_regression": RoutePredictions(
            quantiles.left_out, quantiles.left_out_variance, quantiles.degrees_of_freedom
        ),
    }
    new = PLAN.design(targets, targets["region"])
    routes = {
        "growth_curve": scale_growth_curve(
            *index_fit.predict(new), index_fit.degrees_of_freedom, growth.factor, growth.ln_sd
        ),
        "quantile_regression": RoutePredictions(*quantiles.predict(new), quantiles.degrees_of_freedom),
    }
    pair = at_gauges["growth_curve"], at_gauges["quantile_regression"]
    combination = fit_combination(log10_flow, *pair)
    at_gauges["routes_combined"] = combine_routes(combination, *pair)
    routes["routes_combined"] = combine_routes(
        combination, routes["growth_curve"], routes["quantile_regression"]
    )
    block = split_by_space(latitude, longitude)
    errors = out_of_block_error(log10_flow, *pair, block)
    adopted = min(errors, key=lambda route: errors[route])
    factor = {
        name: calibrate_intervals(log10_flow, quantiles.sampling_variance, one, block, CONFIDENCE).factor
        for name, one in at_gauges.items()
    }
    routes["adopted"], factor["adopted"] = routes[adopted], factor[adopted]
    routes["stream_transfer"] = transfer(
        gauges, targets, routes[adopted], at_gauges[adopted], log10_flow, log10_se, factor[adopted]
    )
    truth = np.log10(region.true_quantile(AEPS))
    area = targets["area_km2"].to_numpy()
    trials = {}
    for name in ROUTES:
        found = state_intervals(routes[name], CONFIDENCE, factor.get(name, 1.0))
        trials[name] = Trial(truth, np.log10(found.flow), np.log10(found.lower), np.log10(found.upper), area)
    return trials


def pool_regions(
    seed: int, gauges: pd.DataFrame, targets: pd.DataFrame, records: PeakRecords, correlation: np.ndarray
) -> Growth:
    """Analyse the pools and take every gauge out of its own in turn."""
    settings = PoolSettings(aep=AEPS, confidence=CONFIDENCE)
    pool_of = gauges["region"].to_numpy()
    lm = sample_lmoments(records.flow_low, records.offsets)
    ratios = np.column_stack([lm.t, lm.t3, lm.t4, lm.t5])
    relative_sd = np.full(len(gauges), np.nan)
    growth, growth_sd = (np.full((len(targets), len(AEPS)), np.nan) for _ in range(2))
    left_out, left_out_sd = (np.full((len(gauges), len(AEPS)), np.nan) for _ in range(2))
    for name in sorted(set(pool_of)):
        members = np.flatnonzero(pool_of == name)
        pool = analyse_pool(
            records.keep_gauges(members),
            correlation[np.ix_(members, members)],
            settings,
            random_stream(seed, "coverage", name),
        )
        relative_sd[members] = pool.index_relative_sd
        here = (targets["region"] == name).to_numpy()
        growth[here], growth_sd[here] = pool.growth.factor, pool.growth.ln_sd_new_site
        weight = dict(zip(pool.gauge_ids, pool.weight, strict=True))
        left_out[members] = left_out_growth_factors(
            pool.curve.distribution,
            ratios[members],
            np.array([weight.get(records.gauge_ids[i], 0.0) for i in members]),
            np.eye(len(members)),
            np.array(AEPS),
            "median",
        )
        left_out_sd[members] = pool.growth.ln_sd_new_site
    return Growth(growth, growth_sd, left_out, left_out_sd, relative_sd)


def regress_quantiles(
    gauges: pd.DataFrame,
    records: PeakRecords,
    design: np.ndarray,
    correlation: np.ndarray,
    common: np.ndarray,
) -> tuple[np.ndarray, np.ndarray, object]:
    """Fit gauges with a constant generalized skew, each without itself, and regress their floods."""
    years = np.diff(records.offsets).astype(float)
    station = fit_records(records, aeps=AEPS, confidence=CONFIDENCE).station.moments.skew
    long = np.flatnonzero(years >= 25)
    between = np.ix_(long, long)
    one = np.ones((len(long), 1))
    model = fit_skew_model(
        prepare_station_skews(station[long], years[long], one, correlation[between], common[between]), one
    )
    everywhere = np.ones((len(gauges), 1))
    skew, mse = model.predict(everywhere)
    skew[long], mse[long] = model.leave_one_out, model.leave_one_out_variance
    errors = generalized_skew_error_covariance(model, everywhere)
    np.fill_diagonal(errors, mse)
    fits = fit_records(records, skew, mse, AEPS, CONFIDENCE).weighted
    area = np.log10(gauges["area_km2"].to_numpy())
    sd = fit_regional_sd(fits.moments.sd, area, years).at(area)
    quantiles = fit_quantile_regression(
        fits.log10_quantile,
        design,
        build_error_model(sd, skew, errors, years, common, correlation),
        np.array(AEPS),
    )
    return fits.log10_quantile, fits.log10_se, quantiles


def transfer(
    gauges: pd.DataFrame,
    targets: pd.DataFrame,
    regional: RoutePredictions,
    at_gauges: RoutePredictions,
    log10_flow: np.ndarray,
    log10_se: np.ndarray,
    factor: float,
) -> RoutePredictions:
    """Carry the departures of gauges to the targets on their streams; NaN where there is no gauge near enough."""
    both, variance = weigh_with_record(
        log10_flow, log10_se**2, at_gauges.log10_flow, factor**2 * at_gauges.variance
    )
    place = {gauge_id: i for i, gauge_id in enumerate(gauges["gauge_id"])}
    flow, spread = (np.full(regional.log10_flow.shape, np.nan) for _ in range(2))
    for i, target in enumerate(targets.itertuples()):
        near = [
            StreamGauge(float(gauges["area_km2"].iloc[j]), both[j], variance[j], at_gauges.log10_flow[j])
            for j in (place.get(name) for name in (target.upstream_gauge, target.downstream_gauge))
            if j is not None
        ]
        found = transfer_along_stream(
            target.area_km2,
            regional.log10_flow[i],
            factor**2 * regional.variance[i],
            near,
            regional.degrees_of_freedom,
        )
        if found is not None:
            flow[i], spread[i] = found.log10_flow[0], found.variance[0]
    return RoutePredictions(flow, spread, regional.degrees_of_freedom)


def interval_score(truth: np.ndarray, lower: np.ndarray, upper: np.ndarray) -> np.ndarray:
    """Interval score of Gneiting and Raftery (2007, J. Am. Stat. Assoc. 102): width plus penalty for misses."""
    alpha = 1 - CONFIDENCE
    miss = np.maximum(lower - truth, 0) + np.maximum(truth - upper, 0)
    return (upper - lower) + 2 / alpha * miss


def summarise(trials: list[Trial], route: str, edges: np.ndarray) -> None:
    """Print coverage and scores by AEP, for all targets and by thirds of basin size."""
    classes = [("all", lambda a: np.full(len(a), True))] + [
        (name, lambda a, i=i: np.digitize(a, edges) == i)
        for i, name in enumerate(("small", "middle", "large"))
    ]
    print(f"  {route}")
    print(
        "    AEP    size    sites  coverage  (s.e.)   bias log10  rmse log10  mean half-width  score / oracle"
    )
    for a in (AEPS.index(aep) for aep in SHOWN):
        for name, chosen in classes:
            picked = [chosen(t.area) & np.isfinite(t.estimate[:, a]) for t in trials]
            error = np.concatenate(
                [(t.estimate - t.truth)[at, a] for t, at in zip(trials, picked, strict=True)]
            )
            if not len(error):
                continue
            hits = [
                ((t.lower <= t.truth) & (t.truth <= t.upper))[at, a]
                for t, at in zip(trials, picked, strict=True)
            ]
            coverage = np.concatenate(hits).mean()
            by_region = np.array([h.sum() - coverage * len(h) for h in hits])
            se = np.sqrt((by_region**2).sum()) / len(error)
            reach = -ndtri((1 - CONFIDENCE) / 2) * np.sqrt((error**2).mean())
            score, oracle, width = [], [], []
            for t, at in zip(trials, picked, strict=True):
                truth, estimate = t.truth[at, a], t.estimate[at, a]
                score.append(interval_score(truth, t.lower[at, a], t.upper[at, a]))
                oracle.append(interval_score(truth, estimate - reach, estimate + reach))
                width.append((t.upper - t.lower)[at, a] / 2)
            ratio = np.concatenate(score).mean() / np.concatenate(oracle).mean()
            print(
                f"    {AEPS[a]:<6g} {name:<7} {len(error):5d}  {coverage:8.3f}  ({se:.3f})  {error.mean():+10.4f}"
                f"  {error.std():10.4f}  {np.concatenate(width).mean():15.4f}  {ratio:14.3f}"
            )


def compare_routes(trials: list[dict[str, Trial]], edges: np.ndarray) -> None:
    """Print mean interval scores side by side, and the combined route against the better of the two it joins."""
    print(
        "  mean interval scores; last: routes_combined less the better single route, in its Monte Carlo standard errors"
    )
    routes = ROUTES[:4]
    print("    AEP    size   " + "".join(f"  {route:>19}" for route in routes) + "    combined - best (s.e.)")
    worst = -np.inf
    for a in (AEPS.index(aep) for aep in SHOWN):
        for size in (None, 0, 1, 2):
            scores = {route: [] for route in routes}
            for trial in trials:
                for route in routes:
                    t = trial[route]
                    at = np.full(len(t.area), True) if size is None else np.digitize(t.area, edges) == size
                    scores[route].append(interval_score(t.truth[at, a], t.lower[at, a], t.upper[at, a]).sum())
            counts = np.array(
                [
                    len(t["adopted"].area)
                    if size is None
                    else (np.digitize(t["adopted"].area, edges) == size).sum()
                    for t in trials
                ]
            )
            means = {route: np.sum(values) / counts.sum() for route, values in scores.items()}
            best = min(("growth_curve", "quantile_regression"), key=lambda route: means[route])
            gap = means["routes_combined"] - means[best]
            each = np.array(scores["routes_combined"]) - np.array(scores[best]) - gap * counts
            se = max(np.sqrt((each**2).sum()) / counts.sum(), 1e-12)
            worst = max(worst, gap / se)
            name = "all" if size is None else ("small", "middle", "large")[size]
            print(
                f"    {AEPS[a]:<6g} {name:<7}"
                + "".join(f"  {means[route]:19.4f}" for route in routes)
                + f"    {gap:+.4f} ({gap / se:+.1f})"
            )
    print(f"  largest excess of routes_combined over the best single route: {worst:+.1f} standard errors")


def main() -> None:
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--regions", type=int, default=50, help="regions of each kind")
    parser.add_argument("--cores", type=int, default=2)
    parser.add_argument("--first-seed", type=int, default=1000)
    arguments = parser.parse_args()
    for kind in ("lp3", "misspecified"):
        jobs = [(arguments.first_seed + i, kind) for i in range(arguments.regions)]
        with ProcessPoolExecutor(arguments.cores) as pool:
            trials = list(pool.map(run_trial, jobs))
        areas = np.concatenate([t["adopted"].area for t in trials])
        edges = np.quantile(areas, [1 / 3, 2 / 3])
        print(
            f"{kind}: {len(trials)} regions, {len(areas)} targets; 90 % intervals; size thirds at {edges[0]:.0f} and {edges[1]:.0f} km2"
        )
        for route in ROUTES:
            summarise([t[route] for t in trials], route, edges)
        compare_routes(trials, edges)


if __name__ == "__main__":
    main()
