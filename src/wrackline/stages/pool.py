"""Stage `pool`: pools of gauges, their tests, and a growth curve with its errors for each."""

from __future__ import annotations

import json
from typing import Any

import numpy as np
import pandas as pd

from wrackline.hydrology.dependence import DistanceModel
from wrackline.hydrology.distances import great_circle_km
from wrackline.hydrology.pools import PoolAnalysis, PoolSettings, analyse_pool
from wrackline.hydrology.records import FloatArray, PeakRecords
from wrackline.report.figures_pool import draw_discordancy, draw_growth_curves, draw_ratio_diagram
from wrackline.report.pool_sections import growth_section, homogeneity_section
from wrackline.stages.running import StudyFiles, main
from wrackline.stats.streams import random_stream
from wrackline.study.config import StudyConfig
from wrackline.study.contribution import Contribution, to_json, write_contribution
from wrackline.study.faults import FaultLog
from wrackline.study.handover import read_records, read_sites
from wrackline.study.pool_tables import build_tables
from wrackline.study.tables import write_text


def run(study: StudyFiles) -> str:
    """Pool the used gauges by region, analyse every pool and write ``work/pool``."""
    config, faults = study.config, FaultLog()
    screened = read_sites(study.work("screen") / "gauges.csv")
    sites = read_sites(study.work("intake") / "gauges.csv")
    used = set(screened.loc[screened["used"], "gauge_id"])
    sites = sites[sites["gauge_id"].isin(used)].sort_values("gauge_id", kind="stable").reset_index(drop=True)
    records = read_records(study.work("screen") / "records.csv", sites["gauge_id"].tolist())
    model = DistanceModel.from_dict(
        json.loads((study.work("dependence") / "model.json").read_text(encoding="utf-8"))
    )
    pool_of_gauge, moves = assign_pools(config, sites, faults)
    pools = analyse_pools(config, sites, records, model, pool_of_gauge, faults)
    faults.stop_on_problems()

    folder = study.work("pool")
    draw_ratio_diagram(folder / "figures" / "lmoment_ratios.png", pools)
    draw_discordancy(folder / "figures" / "discordancy.png", pools)
    draw_growth_curves(folder / "figures" / "growth_curves.png", pools)
    write_text(folder / "growth.json", to_json(describe_growth(config, pools)))
    write_contribution(
        folder,
        Contribution(
            stage="pool",
            tables=build_tables(config, records, pools, pool_of_gauge, moves),
            sections=(homogeneity_section(pools, moves), growth_section(pools, config)),
            warnings=tuple(faults.warnings),
        ),
    )
    gauges = sum(len(pool.gauge_ids) for pool in pools.values())
    return f"{gauges} gauges in {len(pools)} pool{'s' * (len(pools) != 1)}"


def assign_pools(
    config: StudyConfig, sites: pd.DataFrame, faults: FaultLog
) -> tuple[dict[str, str], dict[str, str]]:
    """Name every used gauge's pool (blank: none), and give the reason for each gauge that was moved."""
    if config.pooling.regions == "one":
        home = dict.fromkeys(sites["gauge_id"], "all")
    else:
        home = dict(zip(sites["gauge_id"], sites["region"], strict=True))
    moves: dict[str, str] = {}
    for move in config.pooling.moves:
        if move.gauge_id not in home:
            faults.warning(
                "move_without_gauge",
                "pool",
                f"gauge {move.gauge_id} is to be moved to '{move.to}' but is not among the used gauges",
                "Check its identifier in pooling.moves and whether the screening left it out.",
            )
            continue
        moves[move.gauge_id] = f"moved from '{home[move.gauge_id]}' to '{move.to}': {move.why}"
        home[move.gauge_id] = move.to
    homeless = sorted(gauge for gauge, pool in home.items() if not pool)
    if homeless:
        faults.warning(
            "gauge_in_no_pool",
            "pool",
            f"{len(homeless)} used gauges are in no region and so in no pool: {', '.join(homeless[:12])}"
            + (" ..." if len(homeless) > 12 else ""),
            "Give them a region, draw the region's polygon around them, or set pooling.regions to one.",
        )
    return home, moves


def analyse_pools(
    config: StudyConfig,
    sites: pd.DataFrame,
    records: PeakRecords,
    model: DistanceModel,
    pool_of_gauge: dict[str, str],
    faults: FaultLog,
) -> dict[str, PoolAnalysis]:
    """Analyse every pool on its own random stream; what is doubtful goes to the faults."""
    settings = PoolSettings(
        aep=all_aeps(config),
        statistic=config.index_flood.statistic,
        confidence=config.confidence,
        simulations=config.pooling.simulations,
        close_call_simulations=config.pooling.close_call_simulations,
        growth_simulations=config.pooling.growth_simulations,
        minimum_peaks=config.pooling.minimum_peaks,
    )
    pinned = {pin.pool: pin for pin in config.pooling.distributions}
    names = sorted({name for name in pool_of_gauge.values() if name})
    for name in sorted(set(pinned) - set(names)):
        faults.warning(
            "pin_without_pool", "pool", f"a distribution is fixed for pool '{name}', which does not exist"
        )
    pools = {}
    for name in names:
        members = np.array(
            [i for i, g in enumerate(records.gauge_ids) if pool_of_gauge[g] == name], dtype=np.int64
        )
        pin = pinned.get(name)
        try:
            pools[name] = analyse_pool(
                records.keep_gauges(members),
                correlate_gauges(sites.iloc[members], model),
                settings,
                random_stream(config.seed, "pool", name),
                pin.distribution if pin else None,
                pin.why if pin else "",
            )
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


def describe_growth(config: StudyConfig, pools: dict[str, PoolAnalysis]) -> dict[str, Any]:
    """What later stages and saved models need of every pool."""
    return {
        "statistic": config.index_flood.statistic,
        "confidence": config.confidence,
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
        "gauges": weights | dict.fromkeys(pool.left_out, 0.0),
    }


if __name__ == "__main__":
    main("pool", run)
