"""Stage `estimate`: floods at gauges and at ungauged sites, one adopted for each, and the models that made them."""

from __future__ import annotations

import json
from typing import Any

import numpy as np
import pandas as pd

from wrackline.hydrology.regional_equations import SavedEquations
from wrackline.report.appendices import appendix_section
from wrackline.report.estimate_sections import estimate_section, rare_aep
from wrackline.report.figures_regress import draw_targets
from wrackline.stages.gauge_estimates import GAUGE_COLUMNS, GaugeEstimates, estimate_gauges, gauge_table
from wrackline.stages.gauge_floods import UsedGauges, pools_of_sites, read_gauge_floods, read_used_gauges
from wrackline.stages.running import StudyFiles, main
from wrackline.study.contribution import Contribution, write_contribution
from wrackline.study.faults import Fault, FaultLog
from wrackline.study.handover import read_sites
from wrackline.study.saved_models import adopted_routes, describe_models
from wrackline.study.tables import Table, read_table
from wrackline.study.target_estimates import TARGET_COLUMNS, estimate_targets, site_attributes

LEDGER_TEXT = ("date", "by", "subject", "action", "why", "water_year", "pool", "value", "evidence", "effect")


def run(study: StudyFiles) -> str:
    """Estimate every gauge and target, save the models, and write ``work/estimate``."""
    config, faults = study.config, FaultLog()
    targets = read_sites(study.work("intake") / "targets.csv")
    gauges = read_used_gauges(study)
    ledger = read_table(study.work("intake") / "ledger.csv", text=LEDGER_TEXT)
    equations, growth, routes = (
        _read_json(study, place)
        for place in ("regress/tables/equations.json", "pool/growth.json", "validate/routes.json")
    )
    regional = read_table(study.work("validate") / "regional_left_out.csv", text=("route",))
    at_gauges = estimate_gauges(
        config, gauges.gauge_ids, read_gauge_floods(study, gauges), regional, routes["adopted"]
    )
    records = read_table(study.work("weight") / "tables" / "record_estimates.csv", text=("source",))
    adopt = adopted_routes(config, ledger, set(targets["target_id"]), faults)
    own = targets["target_id"].tolist()
    models = describe_models(
        config,
        equations,
        growth,
        routes,
        _describe_gauges(gauges, at_gauges, regional, equations, pools_of_sites(growth, gauges.gauge_ids)),
        dict(zip(own, pools_of_sites(growth, own), strict=True)) if "home" in growth else {},
        adopt,
    )
    table = estimate_targets(config, models, targets)

    folder = study.work("estimate")
    sections = [appendix_section(config, models, gauges.sites)]
    if len(targets):
        sections.insert(0, estimate_section(config, targets, table, models))
        if table["flow"].notna().any():
            draw_targets(
                folder / "figures" / "targets.png", table[table["adopted"]], rare_aep(config), config
            )
    write_contribution(
        folder,
        Contribution(
            stage="estimate",
            tables=(
                Table("target_estimates", table, TARGET_COLUMNS),
                Table("gauge_estimates", gauge_table(config, at_gauges, records), GAUGE_COLUMNS),
            ),
            sections=tuple(sections),
            warnings=(*faults.warnings, *target_warnings(table)),
            models={"saved_models": models},
        ),
    )
    return f"{len(gauges.gauge_ids)} gauges and {len(targets)} targets; adopted {_count_routes(table)}"


def _read_json(study: StudyFiles, place: str) -> dict[str, Any]:
    stage, name = place.split("/", 1)
    return dict(json.loads((study.work(stage) / name).read_text(encoding="utf-8")))


def _describe_gauges(
    gauges: UsedGauges,
    at_gauges: GaugeEstimates,
    regional: pd.DataFrame,
    equations: dict[str, Any],
    pools: list[str],
) -> dict[str, dict[str, Any]]:
    """What new sites need of every gauge: area, adopted flood, regional estimates without it, pool and attributes."""
    plan = SavedEquations.from_dict(equations["index_flood"]).plan
    places = plan.transformed(site_attributes(gauges.sites, plan))
    by_route = {
        (str(gauge), str(route)): rows["log10_flow"].tolist()
        for (gauge, route), rows in regional.groupby(["gauge_id", "route"], sort=False)
    }
    area = gauges.sites["area_km2"].to_numpy(float)
    routes = sorted(set(regional["route"]))
    found = {}
    for i, gauge in enumerate(gauges.gauge_ids):
        own = {route: by_route[gauge, route] for route in routes if (gauge, route) in by_route}
        if own and np.isfinite(at_gauges.log10_flow[i]).all():
            found[gauge] = {
                "area_km2": float(area[i]),
                "pool": pools[i] if np.isfinite(places[i]).all() else "",
                "place": [value if np.isfinite(value) else None for value in places[i].tolist()],
                "aeps": at_gauges.aeps.tolist(),
                "log10_flow": at_gauges.log10_flow[i].tolist(),
                "variance": at_gauges.variance[i].tolist(),
                "regional": own,
            }
    return found


def _count_routes(table: pd.DataFrame) -> str:
    if table.empty:
        return "no route anywhere"
    adopted = table[table["adopted"]].drop_duplicates("target_id")
    counts = adopted["route"].value_counts().sort_index()
    return ", ".join(f"{route} at {count}" for route, count in counts.items()) or "no route anywhere"


def target_warnings(table: pd.DataFrame) -> list[Fault]:
    """What to know of the adopted estimates (or of their lack) as warnings for the log and the page."""
    faults = FaultLog()
    for target_id, rows in table.groupby("target_id", sort=True):
        adopted = rows[rows["adopted"]]
        note = (adopted if len(adopted) else rows)["warnings"].iloc[0]
        if note:
            faults.warning("target_note", "estimate", f"target {target_id}: {note}")
    return faults.warnings


if __name__ == "__main__":
    main("estimate", run)
