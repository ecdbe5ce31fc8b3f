"""What the page says about the estimates at ungauged sites."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from wrackline.report.rounding import format_flow
from wrackline.study.config import StudyConfig
from wrackline.study.contribution import Figure, PageTable, Section


def rare_aep(config: StudyConfig) -> float:
    """The AEP that figures show: 0.01, or the nearest one of the study."""
    return min(config.aeps.targets, key=lambda aep: abs(np.log(aep / 0.01)))


def estimate_section(
    config: StudyConfig, targets: pd.DataFrame, table: pd.DataFrame, models: dict[str, Any]
) -> Section:
    """The page's words on the targets."""
    nearest = {
        min(config.aeps.targets, key=lambda aep: abs(np.log(aep / wanted))) for wanted in (0.5, 0.1, 0.01)
    }
    shown = sorted(nearest, reverse=True)
    adopted = table[table["adopted"]]
    indexed = adopted.set_index(["target_id", "aep"])
    notes = table.drop_duplicates("target_id").set_index("target_id")["warnings"]
    rows = []
    for target_id, name in zip(targets["target_id"], targets["name"], strict=True):
        if (target_id, shown[0]) in indexed.index:
            first = indexed.loc[(target_id, shown[0])]
            cells = [interval_text(indexed.loc[(target_id, aep)]) for aep in shown]
            rows.append((target_id, name, words(first["route"]), *cells, first["warnings"]))
        else:
            rows.append((target_id, name, "none", *("none" for _ in shown), notes[target_id]))
    rare = adopted[(adopted["aep"] == rare_aep(config)) & adopted["flow"].notna()]
    return Section(
        key="estimates",
        title="Estimates at ungauged sites",
        paragraphs=tuple(_paragraphs(config, targets, adopted, rare, table, models)),
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
                f"Adopted flood estimates in {config.units.flow}, with {config.confidence:.0%} intervals in brackets.",
                ("target", "name", "route", *(f"AEP {aep:g}" for aep in shown), "warnings"),
                tuple(rows),
                "tables/target_estimates.csv",
            ),
        ),
        method=(
            "Growth curve: index-flood method (Dalrymple, 1960), the regression's index flood times the growth curve of the site's pool. Quantile regression: "
            "one equation a probability. Routes combined: their weighted mean in logarithms, one weight for all sites and probabilities. Stream transfer: the departure of a gauge on the "
            "same stream from its regional estimate, whole at equal area and fading to nothing at the limits of the area ratio. Intervals are Student's t in logarithms from the variance of prediction.",
            "One route is adopted for all probabilities of a site: the analyst's where one is named; else the transfer from a gauge on the stream where its average "
            "variance is smaller; else the regional route with the smallest leave-one-out error.",
        ),
    )


def words(route: str) -> str:
    """A route's name in words."""
    return route.replace("_", " ")


def _paragraphs(
    config: StudyConfig,
    targets: pd.DataFrame,
    adopted: pd.DataFrame,
    rare: pd.DataFrame,
    table: pd.DataFrame,
    models: dict[str, Any],
) -> list[str]:
    counts = adopted.drop_duplicates("target_id")["route"].value_counts().sort_index()
    told = [
        f"Floods were estimated at {adopted['target_id'].nunique()} of {len(targets)} ungauged sites; adopted: "
        + (", ".join(f"{words(str(route))} at {count}" for route, count in counts.items()) or "none")
        + ". Every estimate is the median of its predictive distribution, not the mean. The other routes stand in the table of estimates.",
    ]
    if len(rare):
        ratio = float((rare["upper"] / rare["lower"]).median())
        told.append(
            f"For AEP {rare_aep(config):g} the upper end of the {config.confidence:.0%} interval is typically {ratio:.1f} times the lower end."
        )
        told.extend(_disagreement(config, table, rare))
    warned = int((adopted.drop_duplicates("target_id")["warnings"] != "").sum())
    if warned:
        told.append(f"{warned} of the sites carry a warning: read it before the number.")
    for pin in models["adopt"]:
        told.append(
            f"The analyst adopts the route {words(pin['route'])} for {pin['target_id'] or 'all sites'}: {pin['why']}"
        )
    return told


def _disagreement(config: StudyConfig, table: pd.DataFrame, rare: pd.DataFrame) -> list[str]:
    """Name the sites where the two independent routes differ most."""
    both = table[table["aep"] == rare_aep(config)].pivot_table(
        index="target_id", columns="route", values="flow", aggfunc="first"
    )
    if not {"growth_curve", "quantile_regression"} <= set(both.columns):
        return []
    ratio = (both["growth_curve"] / both["quantile_regression"]).dropna()
    if ratio.empty:
        return []
    widest = ratio.index[int(np.abs(np.log(ratio.to_numpy())).argmax())]
    return [
        f"Growth curve and quantile regression differ by a factor of {np.exp(np.median(np.abs(np.log(ratio.to_numpy())))):.2f} at the median site, and most at {widest}: "
        f"{format_flow(both.loc[widest, 'growth_curve'])} against {format_flow(both.loc[widest, 'quantile_regression'])} {config.units.flow}."
    ]


def interval_text(row: pd.Series) -> str:
    """An estimate for reading: ``123 (80 - 190)``."""
    if not np.isfinite(row["flow"]):
        return "none"
    return f"{format_flow(row['flow'])} ({format_flow(row['lower'])} – {format_flow(row['upper'])})"
