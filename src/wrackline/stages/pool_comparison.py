"""Ways of pooling side by side: each predicts the growth curves of gauges that it has not seen."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from wrackline.hydrology.attribute_weights import fit_attribute_weights
from wrackline.hydrology.dependence import DistanceModel
from wrackline.hydrology.distances import great_circle_km
from wrackline.hydrology.growth_curves import Ratios
from wrackline.hydrology.pool_forming import SiteSpace
from wrackline.hydrology.pool_material import PoolMaterial
from wrackline.hydrology.pool_records import take_records
from wrackline.hydrology.pool_validation import (
    OwnCurves,
    PoolingScore,
    fit_own_curves,
    predict_without,
    score,
)
from wrackline.hydrology.pools import Membership, PoolAnalysis, PoolSettings, analyse_pool
from wrackline.hydrology.records import BoolArray, FloatArray, IntArray, PeakRecords
from wrackline.hydrology.vector_bootstrap import bootstrap_years
from wrackline.stats.streams import random_stream
from wrackline.study.config import StudyConfig
from wrackline.study.faults import FaultLog
from wrackline.study.pool_plans import Likeness, PoolPlan, surround

if TYPE_CHECKING:
    from wrackline.stages.pool import PoolInputs

JUDGED_AEPS = (0.1, 0.02, 0.01)
MOST_JUDGED = 200
"""Gauges that the comparison is made at, evenly chosen, at most: enough to tell the ways apart."""
_SIMULATIONS = 300
_FITTED_AEP = 0.02
_FEWEST_JUDGED = 5


def all_aeps(config: StudyConfig) -> tuple[float, ...]:
    """The probabilities of both lists, from often to rare."""
    return tuple(sorted({*config.aeps.gauges, *config.aeps.targets}, reverse=True))


def correlate_gauges(sites: pd.DataFrame, model: DistanceModel) -> FloatArray:
    """Correlation of concurrent peaks between gauges (g, g) from the distances of their basin centroids."""
    latitude, longitude = (
        sites[f"centroid_{axis}"].to_numpy(dtype=float) for axis in ("latitude", "longitude")
    )
    distance = great_circle_km(latitude[:, None], longitude[:, None], latitude[None, :], longitude[None, :])
    correlation = model.correlation(distance)
    np.fill_diagonal(correlation, 1.0)
    return correlation


def analyse_members(
    config: StudyConfig,
    inputs: PoolInputs,
    material: PoolMaterial,
    members: IntArray,
    membership: Membership,
    settings: PoolSettings,
    name: str,
    pinned: str | None = None,
    why: str = "",
) -> PoolAnalysis:
    """Analyse the pool of these gauges on the random stream of its name."""
    return analyse_pool(
        inputs.records.keep_gauges(members),
        correlate_gauges(inputs.gauges.iloc[members], inputs.model),
        settings,
        random_stream(config.seed, "pool", name),
        pinned,
        why,
        material.draws,
        membership,
    )


def compare_ways(
    config: StudyConfig,
    inputs: PoolInputs,
    material: PoolMaterial,
    likeness: Likeness | None,
    plan: PoolPlan,
    pools: dict[str, PoolAnalysis],
) -> tuple[PoolingScore, ...]:
    """Score every configured way of pooling by leave-one-out; nothing where too few gauges have long records."""
    from wrackline.stages.pool import plan_pools, pool_settings

    judged = choose_judged(material, config.pooling.validation_peaks)
    if not config.pooling.compare or judged.sum() < _FEWEST_JUDGED:
        return ()
    aep = np.array(JUDGED_AEPS)
    statistic = config.index_flood.statistic
    own = fit_own_curves(material.lmoments, aep, statistic, material.draws)
    quick = replace(
        pool_settings(config), aep=JUDGED_AEPS, simulations=_SIMULATIONS, growth_simulations=_SIMULATIONS,
        close_call_simulations=_SIMULATIONS, anderson_darling_replicates=0,
    )  # fmt: skip
    predictions: dict[str, tuple[FloatArray, FloatArray]] = {}
    for method in config.pooling.compare:
        if method in ("clusters", "influence") and likeness is None:
            continue
        if method == "influence":
            assert likeness is not None
            predictions[method] = _leave_out_of_influence(config, inputs, material, likeness, judged, quick)
        else:
            its_plan = plan if method == plan.method else plan_pools(
                config, method, inputs, material, likeness, FaultLog()
            )  # fmt: skip
            predictions[method] = _leave_out_of_groups(
                config, inputs, material, its_plan, pools if its_plan is plan else {}, quick
            )
    for predicted, _ in predictions.values():
        # a gauge that one way cannot predict says nothing about the others
        judged &= np.isfinite(predicted).all(axis=1)
    return tuple(
        line
        for method, found in predictions.items()
        for line in score(method, *found, own, material.lmoments.n, aep, judged, config.confidence)
    )


def choose_judged(material: PoolMaterial, fewest_peaks: int) -> BoolArray:
    """Mark the usable gauges that the comparison is made at: long records, evenly chosen where they are many."""
    long = np.flatnonzero(material.lmoments.n >= fewest_peaks)
    if len(long) > MOST_JUDGED:
        long = long[np.linspace(0, len(long) - 1, MOST_JUDGED).round().astype(int)]
    judged = np.zeros(len(material.numbers), dtype=bool)
    judged[long] = True
    return judged


def _leave_out_of_groups(
    config: StudyConfig,
    inputs: PoolInputs,
    material: PoolMaterial,
    plan: PoolPlan,
    pools: dict[str, PoolAnalysis],
    quick: PoolSettings,
) -> tuple[FloatArray, FloatArray]:
    """Predict every usable gauge from the others of its pool; intervals are those of the pool's curve at a new site."""
    lm = material.lmoments
    laws: list[str] = ["GEV"] * len(lm.n)
    averages = [Ratios(*[np.nan] * 4) for _ in lm.n]
    sd = np.full((len(lm.n), len(JUDGED_AEPS)), np.nan)
    for name, members in plan.members.items():
        rows = np.flatnonzero(np.isin(material.numbers, members))
        if len(rows) < 2:
            continue
        pool = pools.get(name)
        if pool is None or not set(JUDGED_AEPS) <= set(pool.aep.tolist()):
            pool = analyse_members(config, inputs, material, members, Membership(), quick, name)
        at = [pool.aep.tolist().index(p) for p in JUDGED_AEPS]
        n = lm.n[rows]
        for row in rows:
            rest = np.where(rows == row, 0.0, n)
            rest /= rest.sum()
            averages[row] = Ratios(*(float(rest @ ratio[rows]) for ratio in (lm.t, lm.t3, lm.t4, lm.t5)))
            laws[row], sd[row] = pool.curve.distribution, pool.growth.ln_sd_new_site[at]
    return predict_without(laws, averages, np.array(JUDGED_AEPS), config.index_flood.statistic), sd


def _leave_out_of_influence(
    config: StudyConfig,
    inputs: PoolInputs,
    material: PoolMaterial,
    likeness: Likeness,
    judged: BoolArray,
    quick: PoolSettings,
) -> tuple[FloatArray, FloatArray]:
    """Predict the judged gauges from pools around them that lack them."""
    shape = (len(judged), len(JUDGED_AEPS))
    predicted, sd = np.full(shape, np.nan), np.full(shape, np.nan)
    allowed = np.zeros(len(material.gauge_ids), dtype=bool)
    allowed[material.numbers] = True
    for row in np.flatnonzero(judged):
        own = int(material.numbers[row])
        chosen, membership = surround(
            config, likeness, material, likeness.among[own], allowed, own, include_own=False
        )
        name = f"without {material.gauge_ids[own]}"
        try:
            pool = analyse_members(config, inputs, material, chosen, membership, quick, name)
        except ValueError:
            continue
        predicted[row] = np.log(np.maximum(pool.growth.factor, 1e-3))
        sd[row] = pool.growth.ln_sd_new_site
    return predicted, sd


def fit_space(config: StudyConfig, likeness: Likeness, material: PoolMaterial, faults: FaultLog) -> SiteSpace:
    """Fit the weights of the attributes; the given ones stay where the fit does not help gauges it has not seen."""
    usable, space, lm = likeness.usable, likeness.space, material.lmoments
    aep, statistic = np.array([_FITTED_AEP]), config.index_flood.statistic
    own: OwnCurves = fit_own_curves(lm, aep, statistic, material.draws)
    among = SiteSpace(space.names, space.weights, space.gauges[usable], space.targets)
    fitted = fit_attribute_weights(
        among, lm, own.ln_factor[:, 0], own.distribution, _FITTED_AEP, statistic,
        config.pooling.influence_years, config.pooling.influence_gauges,
    )  # fmt: skip
    listed = ", ".join(f"{name} {weight:g}" for name, weight in zip(space.names, fitted.weights, strict=True))
    verdict = "they are used" if fitted.pays else "the given weights are kept"
    faults.warning(
        "weights_fitted", "pool",
        f"fitted weights of the attributes ({listed}) bring the leave-one-out error at AEP {_FITTED_AEP:g} from "
        f"{fitted.error_before:.4f} to {fitted.error:.4f}, and to {fitted.error_crossed:.4f} at gauges that had no say; {verdict}",
        "Write them into pooling.attribute_weights to keep them.",
    )  # fmt: skip
    return space.reweigh(fitted.weights) if fitted.pays else space


def bootstrap_pools(
    config: StudyConfig, records: PeakRecords, pools: dict[str, PoolAnalysis]
) -> dict[str, FloatArray]:
    """Bounds of every pool's average curve by resampled years, (2, a) per pool; empty where not asked for."""
    if not config.pooling.year_bootstrap:
        return {}
    number = {gauge: i for i, gauge in enumerate(records.gauge_ids)}
    tail = (1 - config.confidence) / 2
    bounds = {}
    for name, pool in pools.items():
        taken = take_records(
            records.keep_gauges([number[g] for g in pool.gauge_ids]), config.pooling.minimum_peaks
        )
        if set(taken.completed) or taken.records.gauge_ids != pool.gauge_ids:
            continue
        kept = taken.records
        drawn = bootstrap_years(
            random_stream(config.seed, "pool", f"years {name}"), kept.flow_low, kept.offsets,
            np.split(kept.water_year, kept.offsets[1:-1]), (pool.weight, pool.weight_lskew),
            pool.curve.distribution, pool.aep, pool.statistic, config.pooling.year_bootstrap,
        )  # fmt: skip
        good = drawn[np.isfinite(drawn).all(axis=1)]
        if len(good):
            bounds[name] = np.quantile(good, [tail, 1 - tail], axis=0)
    return bounds
