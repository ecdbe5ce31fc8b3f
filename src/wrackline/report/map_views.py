"""What the map's symbols can be coloured by: groups, and numbers at gauges and ungauged sites."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from wrackline.report.rounding import format_aep, format_unit
from wrackline.report.site_details import round_values
from wrackline.study.config import StudyConfig
from wrackline.study.gis import Layer
from wrackline.study.tables import Table

RARE = 0.01


def map_views(
    config: StudyConfig, tables: Mapping[str, Table], layers: Mapping[str, Layer]
) -> list[dict[str, Any]]:
    """Views of the sites, in the order in which the map offers them; one value per site, gauges first.

    A view is ``{key, label, kind, values, note}``: kind ``groups`` (names), ``rising`` (numbers from little to
    much) or ``two_sided`` (numbers about zero); ``note`` says what to see.
    """
    gauges, targets = layers["gauges"].frame, layers["targets"].frame
    gauge_ids, target_ids = gauges["gauge_id"].astype(str).tolist(), targets["target_id"].astype(str).tolist()
    views: list[dict[str, Any]] = []

    def groups(key: str, label: str, note: str, at_gauges: list[Any], at_targets: list[Any]) -> None:
        names = [value if isinstance(value, str) else "" for value in [*at_gauges, *at_targets]]
        if any(names):
            views.append({"key": key, "label": label, "kind": "groups", "note": note, "values": names})

    def numbers(
        key: str,
        label: str,
        kind: str,
        note: str,
        values: dict[str, float],
        at_targets: dict[str, float] | None = None,
    ) -> None:
        at = [values.get(site, np.nan) for site in gauge_ids]
        at += [(at_targets or {}).get(site, np.nan) for site in target_ids]
        if np.isfinite(at).any():
            views.append(
                {
                    "key": key,
                    "label": label,
                    "kind": kind,
                    "note": note,
                    "values": round_values(np.array(at), 3),
                }
            )

    region = gauges["region"].tolist()
    groups("region", "Region", "Regions as the inputs name them.", region, targets["region"].tolist())
    if "pool" in gauges and gauges["pool"].tolist() != region:
        groups("pool", "Pool", "The pool whose growth curve a gauge shares.", gauges["pool"].tolist(), [])
    if not views:
        views.append(
            {
                "key": "sites",
                "label": "Sites",
                "kind": "groups",
                "note": "All sites.",
                "values": ["all"] * (len(gauge_ids) + len(target_ids)),
            }
        )
    rare = _rare(config)
    word = f"{format_aep(rare)} AEP"
    numbers("unit_flood", f"Flood of {word} per area, {format_unit(config.units.flow)} per {format_unit(config.units.area)}", "rising",
            "The adopted flood over the drainage area: small basins and wet ones stand out.",
            _unit_floods(tables.get("gauge_estimates"), "gauge_id", rare, gauges),
            _unit_floods(tables.get("target_estimates"), "target_id", rare, targets))  # fmt: skip
    numbers("n_peaks", "Length of record, peaks", "rising", "How many exactly known systematic peaks a gauge has.",
            _column(tables, "gauge_screening", "n_peaks"))  # fmt: skip
    route = _judged_route(tables)
    numbers("left_out", f"Left-out error at {word}, log10", "two_sided",
            "Estimated as if ungauged, less the flood of the record: neighbours of one colour are a pattern that the models miss.",
            _column(tables, "cross_validation", "log10_error", aep=rare, route=route))  # fmt: skip
    numbers("residual", f"Residual of the regression at {word}, log10", "two_sided",
            "The gauge's flood against the equation; single strong colours deserve a look at the gauge.",
            _column(tables, "regression_gauges", "residual_log10", aep=rare) or _column(tables, "index_floods", "residual_log10"))  # fmt: skip
    numbers("station_skew", "Station skew", "two_sided", "Skew of the logarithms from the record alone; short records scatter widely.",
            _column(tables, "gauge_moments", "station_skew"))  # fmt: skip
    numbers("generalized_skew", "Generalized skew", "two_sided", "The regional skew at every site; at a gauge of the model, from all others.",
            _column(tables, "skew_sites", "generalized_skew", key="site_id", kind="gauge") or _column(tables, "gauge_moments", "generalized_skew"),
            _column(tables, "skew_sites", "generalized_skew", key="site_id", kind="target"))  # fmt: skip
    numbers("discordancy", "Discordancy in the pool", "rising", "High values do not go with the other gauges of the pool.",
            _column(tables, "pools", "discordancy"))  # fmt: skip
    numbers("change", f"Change since the last edition at {word}, %", "two_sided", "How the adopted flood moved since the edition that this run is compared with.",
            _column(tables, "changes", "change_percent", key="site_id", kind="gauge", aep=rare),
            _column(tables, "changes", "change_percent", key="site_id", kind="target", aep=rare))  # fmt: skip
    return views


def _rare(config: StudyConfig) -> float:
    return min(config.aeps.targets, key=lambda aep: abs(np.log(aep / RARE)))


def _judged_route(tables: Mapping[str, Table]) -> str:
    """The route with the smallest mean square left-out error."""
    if "cross_validation" not in tables or tables["cross_validation"].frame.empty:
        return ""
    frame = tables["cross_validation"].frame
    return str((frame["log10_error"] ** 2).groupby(frame["route"]).mean().idxmin())


def _column(
    tables: Mapping[str, Table], table: str, column: str, *, key: str = "gauge_id", **where: Any
) -> dict[str, float]:
    """Values by site of the rows in which the other columns have the wanted values; empty where there are none."""
    if table not in tables or column not in tables[table].frame:
        return {}
    frame = tables[table].frame
    if not {key, *where} <= set(frame.columns):
        return {}
    for name, value in where.items():
        frame = frame[frame[name] == value]
    return dict(zip(frame[key].astype(str), frame[column].astype(float), strict=True))


def _unit_floods(table: Table | None, key: str, aep: float, sites: Any) -> dict[str, float]:
    if table is None:
        return {}
    frame = table.frame
    frame = frame[frame["adopted"].eq(True) & (frame["aep"] == aep)]
    area = dict(zip(sites[key].astype(str), sites["area"].astype(float), strict=True))
    return {
        str(site): float(flow) / area[str(site)]
        for site, flow in zip(frame[key], frame["flow"], strict=True)
        if area.get(str(site), 0) > 0
    }
