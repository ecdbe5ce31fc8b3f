"""Stage `pool`: pools of gauges, their tests, and a growth curve with its errors for each."""

from __future__ import annotations

import json
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from wrackline.hydrology.dependence import DistanceModel
from wrackline.hydrology.homogeneity import PresortedDraws
from wrackline.hydrology.pool_material import PoolMaterial, gather_material
from wrackline.hydrology.pools import PoolAnalysis, PoolSettings
from wrackline.hydrology.records import PeakRecords
from wrackline.report.figures_pool import draw_discordancy, draw_growth_curves, draw_ratio_diagram
from wrackline.report.pool_sections import growth_section, homogeneity_section
from wrackline.report.pool_sheets import choose_sheets, draw_pool_map, draw_sheets
from wrackline.stages.pool_comparison import (
    all_aeps,
    analyse_members,
    bootstrap_pools,
    compare_ways,
    fit_space,
)
from wrackline.stages.running import StudyFiles, main
from wrackline.stats.streams import random_stream
from wrackline.study.config import StudyConfig
from wrackline.study.contribution import Contribution, to_json, write_contribution
from wrackline.study.faults import FaultLog
from wrackline.study.handover import read_records, read_sites
from wrackline.study.pool_plans import (
    Likeness,
    Move,
    PoolPlan,
    gather_moves,
    lay_out,
    measure_likeness,
    plan_clusters,
    plan_influence,
    plan_regions,
)
from wrackline.study.pool_tables import build_tables
from wrackline.study.tables import read_table, write_text


@dataclass(frozen=True)
class PoolInputs:
    """What the stage reads: used gauges and targets in order of identifier, records, correlation, the ledger's moves."""

    gauges: pd.DataFrame
    targets: pd.DataFrame
    records: PeakRecords
    model: DistanceModel
    moves: list[Move]


def run(study: StudyFiles) -> str:
    """Form the study's pools, analyse every one, compare ways of pooling and write ``work/pool``."""
    config, faults = study.config, FaultLog()
    inputs = read_inputs(study)
    material, likeness = prepare(config, inputs, faults)
    faults.stop_on_problems()
    assert material is not None
    plan = plan_pools(config, config.pooling.method, inputs, material, likeness, faults)
    pools = analyse_pools(config, inputs, material, plan, pool_settings(config), faults)
    faults.stop_on_problems()
    for site, name in plan.home.items():
        plan.home[site] = name if name in pools else ""

    scores = compare_ways(config, inputs, material, likeness, plan, pools)
    bootstraps = bootstrap_pools(config, inputs.records, pools)
    shown = choose_sheets(config, pools)
    folder = study.work("pool")
    draw_ratio_diagram(folder / "figures" / "lmoment_ratios.png", shown)
    draw_discordancy(folder / "figures" / "discordancy.png", shown)
    draw_growth_curves(folder / "figures" / "growth_curves.png", shown)
    draw_pool_map(folder / "figures" / "pool_map.png", inputs.gauges, inputs.targets, plan)
    sheets = draw_sheets(folder / "figures", shown, inputs.gauges)
    write_text(folder / "growth.json", to_json(describe_growth(config, pools, plan)))
    homogeneity = homogeneity_section(
        pools, shown, plan, effects_of_moves(material, plan), sheets, inputs.gauges
    )
    write_contribution(
        folder,
        Contribution(
            stage="pool",
            tables=build_tables(config, inputs.records, pools, plan, scores, bootstraps),
            sections=(homogeneity, growth_section(shown, config, scores, plan.method, bootstraps)),
            warnings=tuple(faults.warnings),
        ),
    )
    gauges = len({gauge for pool in pools.values() for gauge in pool.gauge_ids})
    return f"{gauges} gauges in {len(pools)} pool{'s' * (len(pools) != 1)}"


def read_inputs(study: StudyFiles) -> PoolInputs:
    """Read what the stages before left."""
    screened = read_sites(study.work("screen") / "gauges.csv")
    gauges = read_sites(study.work("intake") / "gauges.csv")
    used = set(screened.loc[screened["used"], "gauge_id"])
    gauges = (
        gauges[gauges["gauge_id"].isin(used)].sort_values("gauge_id", kind="stable").reset_index(drop=True)
    )
    targets = read_sites(study.work("intake") / "targets.csv")
    targets = targets.sort_values("target_id", kind="stable").reset_index(drop=True)
    ledger = read_table(
        study.work("intake") / "ledger.csv",
        text=("date", "by", "subject", "action", "why", "water_year", "pool", "value", "evidence", "effect"),
    )
    return PoolInputs(
        gauges,
        targets,
        read_records(study.work("screen") / "records.csv", gauges["gauge_id"].tolist()),
        DistanceModel.from_dict(
            json.loads((study.work("dependence") / "model.json").read_text(encoding="utf-8"))
        ),
        gather_moves(study.config, ledger),
    )


def prepare(
    config: StudyConfig, inputs: PoolInputs, faults: FaultLog
) -> tuple[PoolMaterial | None, Likeness | None]:
    """Gather what all pools share, and how alike the sites are where pooling or its comparison needs that."""
    draws = PresortedDraws(
        int(random_stream(config.seed, "pool", "draws").integers(2**62)), config.pooling.simulations
    )
    try:
        material = gather_material(inputs.records, config.pooling.minimum_peaks, draws)
    except ValueError as reason:
        faults.problem("no_pool", "pool", f"no pool could be formed: {reason}", "Give gauges longer records.")
        return None, None
    space = lay_out(config, inputs.gauges, inputs.targets, faults)
    if space is None:
        return material, None
    likeness = measure_likeness(space, material)
    if config.pooling.fit_weights:
        likeness = measure_likeness(fit_space(config, likeness, material, faults), material)
    return material, likeness


def plan_pools(
    config: StudyConfig,
    method: str,
    inputs: PoolInputs,
    material: PoolMaterial,
    likeness: Likeness | None,
    faults: FaultLog,
) -> PoolPlan:
    """Form the pools by one way of pooling."""
    if method in ("regions", "one"):
        if method == "one":
            config = config.model_copy(
                update={"pooling": config.pooling.model_copy(update={"regions": "one"})}
            )
        return plan_regions(config, inputs.gauges, inputs.targets, inputs.moves, faults)
    if likeness is None:
        faults.problem(
            "nothing_to_pool_by", "pool", f"pooling by {method} needs attributes or distances, and has neither",
            "Declare attributes, or set pooling.distance_weight above zero.",
        )  # fmt: skip
        faults.stop_on_problems()
        raise AssertionError
    way = plan_clusters if method == "clusters" else plan_influence
    return way(config, inputs.gauges, inputs.targets, likeness, material, inputs.moves, faults)


def pool_settings(config: StudyConfig) -> PoolSettings:
    """The settings of an analysis as configured."""
    pooling = config.pooling
    return PoolSettings(
        aep=all_aeps(config),
        statistic=config.index_flood.statistic,
        confidence=config.confidence,
        simulations=pooling.simulations,
        close_call_simulations=pooling.close_call_simulations,
        growth_simulations=pooling.growth_simulations,
        minimum_peaks=pooling.minimum_peaks,
        anderson_darling_replicates=pooling.anderson_darling_replicates,
    )


def analyse_pools(
    config: StudyConfig,
    inputs: PoolInputs,
    material: PoolMaterial,
    plan: PoolPlan,
    settings: PoolSettings,
    faults: FaultLog,
) -> dict[str, PoolAnalysis]:
    """Analyse every pool on its own random stream and on draws that all share; what is doubtful goes to the faults."""
    pinned = {pin.pool: pin for pin in config.pooling.distributions}
    for name in sorted(set(pinned) - set(plan.members)):
        faults.warning(
            "pin_without_pool", "pool", f"a distribution is fixed for pool '{name}', which does not exist"
        )
    pools = {}
    for name in sorted(plan.members):
        pin = pinned.get(name)
        try:
            pools[name] = analyse_members(
                config, inputs, material, plan.members[name], plan.membership[name], settings, name,
                pin.distribution if pin else None, pin.why if pin else "",
            )  # fmt: skip
        except ValueError as reason:
            faults.warning(
                "pool_without_curve", "pool", f"pool '{name}' has no growth curve: {reason}",
                "Join it with another region, or give its gauges longer records.",
            )  # fmt: skip
            continue
        for warning in pools[name].warnings:
            faults.warning("pool_warning", "pool", f"pool '{name}': {warning}")
    if not pools:
        faults.problem(
            "no_pool", "pool", "no pool could be formed",
            "Give gauges.csv a region column or set pooling.regions to one; every pool needs a gauge with "
            f"{config.pooling.minimum_peaks} peaks.",
        )  # fmt: skip
    return pools


def effects_of_moves(material: PoolMaterial, plan: PoolPlan) -> list[str]:
    """Say what the analyst's moves did to the H1 of the pools they touch."""
    told = []
    for name, before in plan.before_moves.items():
        now = plan.members.get(name)
        h1 = [material.h1_of_gauges(m) if m is not None else float("nan") for m in (before, now)]
        text = [f"{h:.2f}".replace("-", "\N{MINUS SIGN}") if h == h else "no H1" for h in h1]
        told.append(
            f"The moves took pool {name} from {len(before)} gauges (H1 {text[0]}) to "
            f"{0 if now is None else len(now)} ({text[1]})."
        )
    return told


def describe_growth(config: StudyConfig, pools: dict[str, PoolAnalysis], plan: PoolPlan) -> dict[str, Any]:
    """What later stages and saved models need of every pool."""
    return {
        "statistic": config.index_flood.statistic,
        "confidence": config.confidence,
        "method": plan.method,
        "home": dict(plan.home),
        "pools": {name: _describe_pool(pool) for name, pool in pools.items()},
    }


def _describe_pool(pool: PoolAnalysis) -> dict[str, Any]:
    lcv, lskew, lkurtosis, l5 = pool.ratios
    weights = dict(zip(pool.gauge_ids, pool.weight.tolist(), strict=True))
    return {
        "distribution": pool.curve.distribution,
        "by_evidence": pool.choice.by_evidence,
        "parameters": pool.curve.parameters.tolist(),
        "scale": pool.curve.scale,
        "aeps": pool.aep.tolist(),
        "growth_factor": pool.growth.factor.tolist(),
        "lower": pool.growth.lower.tolist(),
        "upper": pool.growth.upper.tolist(),
        "ln_sd_new_site": pool.growth.ln_sd_new_site.tolist(),
        "ln_sd_region": pool.growth.ln_sd_region.tolist(),
        "lcv": lcv,
        "lskew": lskew,
        "lkurtosis": lkurtosis,
        "l5_ratio": l5,
        "between_lcv_sd": pool.between.mean_lcv_sd,
        "between_lskew_sd": pool.between.mean_lskew_sd,
        "density_at_median": pool.curve.density_at_median,
        "index_relative_sd": pool.index_relative_sd,
        "n_gauges": len(pool.gauge_ids),
        "station_years": pool.station_years,
        "heterogeneous": pool.heterogeneous,
        "verdict": pool.verdict,
        "gauges_lskew": dict(zip(pool.gauge_ids, pool.weight_lskew.tolist(), strict=True)),
        "after_selection": pool.after_selection,
        "h1": _or_none(float(pool.heterogeneity.h[0])),
        "gauges": weights | dict.fromkeys(pool.left_out, 0.0),
    }


def _or_none(value: float) -> float | None:
    return value if np.isfinite(value) else None


if __name__ == "__main__":
    main("pool", run)
