"""Stage `skew`: the generalized skew of the region, its errors, and its map."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from wrackline.hydrology.skew_candidates import Comparison, compare_candidates, plan_candidates
from wrackline.report.figures_skew import draw_candidates, draw_covariate, draw_maps, draw_station_skews
from wrackline.stages.running import StudyFiles, main
from wrackline.stages.skew_material import (
    SkewMaterial,
    gather_material,
    stations_of,
    transforms_of,
    tried_regressions,
)
from wrackline.stages.skew_page import skew_section
from wrackline.stages.skew_places import (
    SkewAtSites,
    SkewMap,
    draw_map,
    given_sites,
    predict_sites,
    shared_errors,
)
from wrackline.stages.skew_tables import describe_model, skew_tables, work_sites
from wrackline.study.config import StudyConfig
from wrackline.study.contribution import Contribution, to_json, write_contribution
from wrackline.study.faults import FaultLog
from wrackline.study.skew_map import cell_table, contour_table, write_skew_tif
from wrackline.study.tables import write_table, write_text

FEWEST_GAUGES = 5
"""With fewer gauges no generalized skew is fitted."""
ERROR_COVARIANCE = "error_covariance.npy"


def run(study: StudyFiles) -> str:
    """Fit, choose and map the generalized skew; write ``work/skew``."""
    config, folder = study.config, study.work("skew")
    material = gather_material(study)
    faults = FaultLog()
    comparison = None
    if config.skew.source == "fitted":
        comparison = fit_comparison(config, material, faults)
        sites = predict_sites(material, comparison)
    else:
        sites = given_sites(study, material, faults)
    _warn(config, material, comparison, sites, faults)

    given = study.folder / config.skew.given_map if config.skew.source == "map" else None
    drawn = draw_map(config, material, comparison, sites, given)
    write_skew_tif(folder / "skew.tif", drawn.grid, drawn.skew, drawn.mse)
    write_table(folder / "skew_cells.csv", cell_table(drawn.grid, drawn.skew, drawn.mse))
    smooth = comparison is not None and comparison.chosen.plan.kind == "surface"
    level = drawn.skew if smooth else np.full_like(drawn.skew, np.nan)
    write_table(folder / "skew_contours.csv", contour_table(drawn.grid, level))

    model = describe_model(config, material, comparison)
    write_text(folder / "model.json", to_json(model))
    write_table(
        folder / "sites.csv", work_sites(material, sites.skew, sites.mse, sites.left_out, sites.design)
    )
    np.save(folder / ERROR_COVARIANCE, shared_errors(material, comparison, sites))
    figures = _draw(folder / "figures", config, material, comparison, sites, drawn)
    tables = skew_tables(config, material, comparison, sites.skew, sites.mse, sites.left_out, sites.outside)
    section = skew_section(config, material, comparison, tables, model, figures, drawn.reach_km)
    write_contribution(
        folder, Contribution("skew", tables, (section,), tuple(faults.warnings), {"skew_model": model})
    )
    if comparison is None:
        return "given" if config.skew.source != "fitted" else "too few gauges for a generalized skew"
    return f"model '{comparison.chosen.plan.name}' from {len(material.serve)} gauges"


def fit_comparison(config: StudyConfig, material: SkewMaterial, faults: FaultLog) -> Comparison | None:
    """Fit and compare the candidates; None, with a warning, where the gauges are too few."""
    n = len(material.serve)
    if n < FEWEST_GAUGES:
        faults.warning(
            "too_few_gauges_for_skew",
            "skew",
            f"{n} gauges could shape a generalized skew, fewer than {FEWEST_GAUGES}; fits keep their station skews",
            "Lower skew.minimum_record_years, or give a skew from elsewhere (skew.source).",
        )
        return None
    regressions = tried_regressions(config)
    stations = stations_of(material, sorted({name for names in regressions for name in names}))
    plans, refused = plan_candidates(
        stations, regressions, transforms_of(config), config.skew.by_region, config.skew.surface
    )
    try:
        return compare_candidates(stations, plans, refused, pinned=config.skew.model)
    except ValueError as reason:
        faults.problem(
            "fixed_skew_model", "skew", f"skew.model: {reason}", "Name another model, or leave it blank."
        )
        faults.stop_on_problems()
        raise


def _warn(
    config: StudyConfig,
    material: SkewMaterial,
    comparison: Comparison | None,
    sites: SkewAtSites,
    faults: FaultLog,
) -> None:
    names = material.sites["site_id"].to_numpy()
    if comparison is not None:
        chosen = comparison.chosen
        if chosen.model.stations.repaired:
            faults.warning(
                "skew_covariance_repaired",
                "skew",
                "the correlation of the sampling errors of the station skews could not be factored; the nearest one that can was used",
                "Look for gauges with the same record, or basins with one centroid.",
            )
        if config.skew.model and comparison.evidence != chosen.plan.name:
            faults.warning(
                "skew_model_fixed",
                "skew",
                f"the skew model is fixed to '{chosen.plan.name}'; the evidence would choose '{comparison.evidence}'",
                "Keep the reason in skew.why up to date.",
            )
        if chosen.diagnostics is not None:
            for i in np.flatnonzero(chosen.diagnostics.high_influence):
                faults.warning(
                    "skew_influence",
                    "skew",
                    f"gauge {names[material.serve[i]]} moves the generalized skew more than others do (influence "
                    f"{chosen.diagnostics.influence[i]:.3f}, limit {4 / len(material.serve):.3f})",
                    "Check its record, above all the largest and the smallest peaks.",
                )
        for i in np.flatnonzero(sites.outside & ~sites.left_out & np.isfinite(sites.skew)):
            faults.warning(
                "skew_beyond_attributes",
                "skew",
                f"site {names[i]} has attributes beyond those of the gauges behind the generalized skew",
                "Take its generalized skew with caution.",
            )
    lacking = np.flatnonzero(~np.isfinite(sites.skew))
    if len(lacking) and (comparison is not None or config.skew.source != "fitted"):
        listed = ", ".join(names[lacking][:12]) + (" ..." if len(lacking) > 12 else "")
        faults.warning(
            "no_generalized_skew",
            "skew",
            f"{len(lacking)} sites have no generalized skew: {listed}",
            "Give them the attributes or the region that the model uses, or a map that covers them.",
        )


def _draw(
    folder: Path,
    config: StudyConfig,
    material: SkewMaterial,
    comparison: Comparison | None,
    sites: SkewAtSites,
    drawn: SkewMap,
) -> list[str]:
    """Draw the stage's figures; return their names."""
    names = []
    at = material.sites.iloc[material.serve]
    if np.isfinite(drawn.skew).any():
        residual = None if comparison is None else comparison.chosen.model.residuals
        draw_maps(folder / "skew_map.png", drawn.grid, drawn.skew, drawn.mse, at, residual)
        names.append("skew_map.png")
    if comparison is not None:
        stations = comparison.chosen.model.stations
        level = comparison.chosen.model.fitted
        draw_station_skews(folder / "skew_gauges.png", stations, level, at["region"].tolist())
        names.append("skew_gauges.png")
        if len(comparison.candidates) > 1:
            draw_candidates(folder / "skew_candidates.png", comparison)
            names.append("skew_candidates.png")
        if comparison.chosen.plan.attributes.names:
            draw_covariate(folder / "skew_covariates.png", comparison)
            names.append("skew_covariates.png")
    return names


if __name__ == "__main__":
    main("skew", run)
