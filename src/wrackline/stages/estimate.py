"""Stage `estimate`: floods at the ungauged targets."""

from __future__ import annotations

import json
from typing import Any

import numpy as np
import pandas as pd

from wrackline.hydrology.attributes import DesignPlan
from wrackline.hydrology.records import FloatArray
from wrackline.hydrology.ungauged import SiteEstimates, scale_growth_curve
from wrackline.report.figures_regress import draw_targets
from wrackline.report.rounding import format_flow
from wrackline.stages.regress import site_attributes
from wrackline.stages.running import StudyFiles, main
from wrackline.stats.gls import spread
from wrackline.study.config import StudyConfig
from wrackline.study.contribution import Contribution, Figure, PageTable, Section, write_contribution
from wrackline.study.faults import Fault, FaultLog
from wrackline.study.handover import read_sites
from wrackline.study.tables import Column, Table

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


def run(study: StudyFiles) -> str:
    """Estimate every target by the growth-curve route and write ``work/estimate``."""
    config = study.config
    targets = read_sites(study.work("intake") / "targets.csv")
    equation = json.loads((study.work("regress") / "tables" / "equations.json").read_text(encoding="utf-8"))[
        "index_flood"
    ]
    pools = json.loads((study.work("pool") / "growth.json").read_text(encoding="utf-8"))["pools"]

    pool = [name if name in pools else ("all" if "all" in pools else "") for name in targets["region"]]
    estimates, notes = estimate_targets(config, targets, equation, pools, pool)
    table = target_table(config, targets["target_id"].tolist(), estimates, notes)
    contribution = Contribution(
        stage="estimate",
        tables=(Table("target_estimates", table, TARGET_COLUMNS),),
        sections=(page_section(config, targets, pool, table),) if len(targets) else (),
        warnings=tuple(target_warnings(targets, notes)),
    )
    if len(targets) and table["flow"].notna().any():
        draw_targets(study.work("estimate") / "figures" / "targets.png", table, rare_aep(config), config)
    write_contribution(study.work("estimate"), contribution)
    return f"{len(targets)} targets at {len(config.aeps.targets)} AEPs"


def estimate_targets(
    config: StudyConfig,
    targets: pd.DataFrame,
    equation: dict[str, Any],
    pools: dict[str, Any],
    pool: list[str],
) -> tuple[SiteEstimates, list[list[str]]]:
    """Return the estimates (targets, AEPs) in m3/s and, per target, what to know before use."""
    plan = DesignPlan(
        tuple(equation["attributes"]), tuple(equation["transforms"]), tuple(equation["regions"])
    )
    attributes = site_attributes(targets, plan)
    design = plan.design(attributes, pool)
    covariance = np.array(equation["coefficient_covariance"])
    index_log10 = design @ np.array(equation["coefficients"])
    distance = spread(design, covariance)
    growth, growth_sd = growth_at(config.aeps.targets, pools, pool)
    estimates = scale_growth_curve(
        index_log10,
        equation["model_variance"] + distance,
        equation["degrees_of_freedom"],
        growth,
        growth_sd,
        config.confidence,
    )
    notes = range_notes(plan, plan.transformed(attributes), distance, equation)
    for i, name in enumerate(pool):
        if not name:
            notes[i].insert(0, "no estimate: the site is in no pool")
            continue
        if pools[name]["heterogeneous"]:
            notes[i].append(f"pool {name} is heterogeneous")
        longest = 1.0 / min(config.aeps.targets)
        if pools[name]["station_years"] < longest:
            notes[i].append(
                f"pool {name} has {pools[name]['station_years']} station-years, fewer than 1/AEP of the rarest floods"
            )
    return estimates, notes


def growth_at(
    aeps: tuple[float, ...], pools: dict[str, Any], pool: list[str]
) -> tuple[FloatArray, FloatArray]:
    """Growth factors and the ln standard deviations of their errors at new sites, (targets, AEPs); NaN in no pool."""
    growth = np.full((len(pool), len(aeps)), np.nan)
    growth_sd = np.full_like(growth, np.nan)
    for i, name in enumerate(pool):
        if name:
            at = [pools[name]["aeps"].index(aep) for aep in aeps]
            growth[i] = np.array(pools[name]["growth_factor"])[at]
            growth_sd[i] = np.array(pools[name]["ln_sd_new_site"])[at]
    return growth, growth_sd


def range_notes(
    plan: DesignPlan, transformed: FloatArray, distance: FloatArray, equation: dict[str, Any]
) -> list[list[str]]:
    """Say for every target which attributes, alone or together, lie beyond the gauges' range."""
    lower, upper = np.array(equation["transformed_lower"]), np.array(equation["transformed_upper"])
    notes: list[list[str]] = []
    for row, own_distance in zip(transformed, distance, strict=True):
        beyond = [
            f"{name} is {'below' if value < low else 'above'} the gauges' range"
            for name, value, low, high in zip(plan.names, row, lower, upper, strict=True)
            if value < low or value > high
        ]
        if not beyond and own_distance > equation["largest_spread"]:
            beyond = ["its attributes are each within range, but not together"]
        notes.append(beyond)
    return notes


def target_table(
    config: StudyConfig, target_ids: list[str], estimates: SiteEstimates, notes: list[list[str]]
) -> pd.DataFrame:
    """The published rows, flows in the declared unit; a site without an estimate keeps its rows, blank."""
    aeps = config.aeps.targets
    flow = estimates.flow.ravel() / config.flow_in_m3s
    return pd.DataFrame(
        {
            "target_id": np.repeat(np.array(target_ids, dtype=object), len(aeps)),
            "aep": np.tile(np.array(aeps, dtype=float), len(target_ids)),
            "route": "growth_curve",
            "flow": flow,
            "lower": estimates.lower.ravel() / config.flow_in_m3s,
            "upper": estimates.upper.ravel() / config.flow_in_m3s,
            "se_log10": estimates.se_log10.ravel(),
            "adopted": np.isfinite(flow),
            "warnings": np.repeat(np.array(["; ".join(note) for note in notes], dtype=object), len(aeps)),
        }
    )


def target_warnings(targets: pd.DataFrame, notes: list[list[str]]) -> list[Fault]:
    """The same notes as warnings for the log and the page."""
    faults = FaultLog()
    for target_id, note in zip(targets["target_id"], notes, strict=True):
        if note:
            faults.warning("target_note", "estimate", f"target {target_id}: {'; '.join(note)}")
    return faults.warnings


def rare_aep(config: StudyConfig) -> float:
    """The AEP that figures show: 0.01, or the nearest one of the study."""
    return min(config.aeps.targets, key=lambda aep: abs(np.log(aep / 0.01)))


def page_section(config: StudyConfig, targets: pd.DataFrame, pool: list[str], table: pd.DataFrame) -> Section:
    """The page's words on the targets."""
    shown = [
        min(config.aeps.targets, key=lambda aep: abs(np.log(aep / wanted))) for wanted in (0.5, 0.1, 0.01)
    ]
    shown = sorted(set(shown), reverse=True)
    unit = config.units.flow
    indexed = table.set_index(["target_id", "aep"])
    rows = tuple(
        (
            target.target_id,
            target.name_text,
            pool_name or "none",
            *(interval_text(indexed.loc[(target.target_id, aep)]) for aep in shown),
            indexed.loc[(target.target_id, shown[0]), "warnings"],
        )
        for target, pool_name in zip(
            targets.rename(columns={"name": "name_text"}).itertuples(), pool, strict=True
        )
    )
    rare = table[(table["aep"] == rare_aep(config)) & table["flow"].notna()]
    ratio = float((rare["upper"] / rare["lower"]).median()) if len(rare) else float("nan")
    warned = int(table.groupby("target_id")["warnings"].first().ne("").sum())
    paragraphs = [
        f"Floods were estimated at {rare['target_id'].nunique()} of {len(targets)} ungauged sites as index flood times growth factor. "
        "Every estimate is the median of its predictive distribution, not the mean.",
    ]
    if len(rare):
        paragraphs.append(
            f"For AEP {rare_aep(config):g} the upper end of the {config.confidence:.0%} interval is typically {ratio:.1f} times the lower end."
        )
    if warned:
        paragraphs.append(f"{warned} of the sites carry a warning: read it before the number.")
    return Section(
        key="estimates",
        title="Estimates at ungauged sites",
        paragraphs=tuple(paragraphs),
        figures=(
            Figure(
                "targets.png",
                f"Floods of AEP {rare_aep(config):g} at the targets with their {config.confidence:.0%} intervals; diamonds carry a warning.",
                "Dot and interval for every target on a logarithmic flow axis.",
            ),
        )
        if len(rare)
        else (),
        tables=(
            PageTable(
                f"Flood estimates in {unit}, with {config.confidence:.0%} intervals in brackets.",
                ("target", "name", "pool", *(f"AEP {aep:g}" for aep in shown), "warnings"),
                rows,
                "tables/target_estimates.csv",
            ),
        ),
        method=(
            "Index-flood method (Dalrymple, 1960): the regression's index flood times the growth curve of the site's pool. The interval "
            "adds the regression's variance of prediction and the growth curve's error at a new site in log space, with Student's t.",
        ),
    )


def interval_text(row: pd.Series) -> str:
    """An estimate for reading: ``123 (80 - 190)``."""
    if not np.isfinite(row["flow"]):
        return "none"
    return f"{format_flow(row['flow'])} ({format_flow(row['lower'])} – {format_flow(row['upper'])})"


if __name__ == "__main__":
    main("estimate", run)
