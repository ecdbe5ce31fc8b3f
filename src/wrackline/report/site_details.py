"""What the page shows of a picked site: its floods by route, its peaks and thresholds, its screening."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import pandas as pd
from scipy.special import ndtri

from wrackline.hydrology.records import PeakRecords
from wrackline.report.rounding import format_significant
from wrackline.study.config import StudyConfig
from wrackline.study.published import declared_unit
from wrackline.study.tables import Table

DIGITS = 4
"""Significant digits of flows behind the curves; the page shows three."""
SCREENING_FACTS = (
    ("gauge_screening", "n_peaks", "peaks, exactly known"),
    ("gauge_screening", "first_year", "first year"),
    ("gauge_screening", "last_year", "last year"),
    ("gauge_screening", "gap_years", "years missing"),
    ("gauge_screening", "trend_p", "trend, p-value"),
    ("gauge_screening", "sen_slope", "slope of the peaks"),
    ("gauge_screening", "change_point_p", "change point, p-value"),
    ("gauge_screening", "lag1_correlation", "correlation of consecutive years"),
    ("gauge_moments", "station_skew", "station skew"),
    ("gauge_moments", "generalized_skew", "generalized skew"),
    ("gauge_moments", "weighted_skew", "weighted skew"),
    ("low_flood_tests", "count", "low floods"),
    ("pools", "discordancy", "discordancy in its pool"),
)
"""Table, column and wording of the facts about a gauge; what a study lacks is left out."""


def round_values(values: np.ndarray, digits: int = DIGITS) -> list[float | None]:
    """Round to significant digits for the page; None where there is no finite number."""
    return [
        float(f"{value:.{digits}g}") if np.isfinite(value) else None
        for value in np.asarray(values, dtype=float)
    ]


def flood_curves(table: Table | None, key: str, route: str) -> dict[str, dict[str, Any]]:
    """Floods of every site by route: ``{site: {route: {p, flow, lower, upper, adopted, note}}}``.

    Parameters
    ----------
    table : Table or None
        `gauge_estimates` or `target_estimates`.
    key, route : str
        Columns of the site and of the route.
    """
    found: dict[str, dict[str, Any]] = {}
    if table is None or table.frame.empty:
        return found
    frame = table.frame.sort_values([key, route, "aep"], ascending=[True, True, False], kind="stable")
    numbers = {name: round_values(frame[name].to_numpy(dtype=float)) for name in ("flow", "lower", "upper")}
    aeps = frame["aep"].to_numpy(dtype=float).tolist()
    adopted = frame["adopted"].eq(True).to_numpy()
    notes = frame["warnings"].tolist() if "warnings" in frame else [""] * len(frame)
    sites, routes = frame[key].astype(str).to_numpy(), frame[route].astype(str).to_numpy()
    change = np.flatnonzero((sites[1:] != sites[:-1]) | (routes[1:] != routes[:-1])) + 1
    for start, end in zip([0, *change], [*change, len(frame)], strict=True):
        if all(value is None for value in numbers["flow"][start:end]):
            continue
        one: dict[str, Any] = {name: values[start:end] for name, values in numbers.items()}
        one["p"] = aeps[start:end]
        if adopted[start]:
            one["adopted"] = True
        if isinstance(notes[start], str) and notes[start]:
            one["note"] = notes[start]
        found.setdefault(sites[start], {})[routes[start]] = one
    return found


def site_notes(tables: Mapping[str, Table]) -> dict[str, list[str]]:
    """Remarks on gauges: why one is not used, and what the fit at the gauge warns of."""
    found: dict[str, list[str]] = {}
    for name, column in (("gauge_screening", "reasons"), ("gauge_warnings", "warning"), ("pools", "remark")):
        if name not in tables or column not in tables[name].frame:
            continue
        frame = tables[name].frame
        for gauge, text in zip(frame["gauge_id"], frame[column], strict=True):
            if isinstance(text, str) and text:
                notes = found.setdefault(str(gauge), [])
                if text not in notes:
                    notes.append(text)
    return found


def gauge_facts(config: StudyConfig, tables: Mapping[str, Table]) -> tuple[list[str], dict[str, list[str]]]:
    """Wordings of the facts, and per gauge their values as text (blank where there is none)."""
    labels: list[str] = []
    columns: list[dict[str, str]] = []
    for name, column, label in SCREENING_FACTS:
        if name not in tables or column not in tables[name].frame:
            continue
        frame = tables[name].frame
        unit = declared_unit(next(c.unit for c in tables[name].columns if c.name == column), config)
        shown = unit if unit in ("% per decade",) else ""
        labels.append(f"{label}, {shown}" if shown else label)
        columns.append({str(g): _fact(v) for g, v in zip(frame["gauge_id"], frame[column], strict=True)})
    gauges = sorted({gauge for column in columns for gauge in column})
    return labels, {gauge: [column.get(gauge, "") for column in columns] for gauge in gauges}


def _fact(value: Any) -> str:
    if isinstance(value, str):
        return value
    if value is None or not np.isfinite(float(value)):
        return ""
    number = float(value)
    return f"{number:.0f}" if number.is_integer() and abs(number) >= 1 else format_significant(number, 3)


def peaks_of_gauges(
    config: StudyConfig, records: PeakRecords, tables: Mapping[str, Table]
) -> dict[str, dict[str, list[Any]]]:
    """Per gauge its peaks, with the places at which they are plotted, and its perception thresholds.

    ``z`` is the standard normal variate of the non-exceedance probability, ``kind`` 0 systematic, 1 historic and
    2 a low flood; ``thresholds`` holds spans (first year, last year, lowest, highest flood on record; None unbounded).
    """
    unit = config.flow_in_m3s
    z_of = _plotting_places(tables)
    low_limit: dict[str, float] = {}
    if "low_flood_tests" in tables:
        frame = tables["low_flood_tests"].frame
        low_limit = dict(zip(frame["gauge_id"].astype(str), frame["threshold"].fillna(0.0), strict=True))
    found = {}
    for number, gauge in enumerate(records.gauge_ids):
        rows = np.arange(records.offsets[number], records.offsets[number + 1])
        spans = _threshold_spans(records, rows, unit)
        rows = rows[records.observed[rows]]
        low, high = records.flow_low[rows] / unit, records.flow_high[rows] / unit
        kind = np.where(records.historic[rows], 1, np.where(high < low_limit.get(gauge, 0.0), 2, 0))
        years = records.water_year[rows].tolist()
        found[gauge] = {
            "year": years,
            "low": round_values(low),
            "high": round_values(high),
            "kind": kind.tolist(),
            "z": [z_of.get((gauge, year)) for year in years],
            "thresholds": spans,
        }
    return found


def _plotting_places(tables: Mapping[str, Table]) -> dict[tuple[str, int], float]:
    if "plotting_positions" not in tables:
        return {}
    frame = tables["plotting_positions"].frame
    aep = frame["aep"].to_numpy(dtype=float)
    inside = (aep > 0) & (aep < 1)
    z = np.round(-ndtri(np.where(inside, aep, 0.5)), 4)
    keys = zip(frame["gauge_id"].astype(str), frame["water_year"].astype(int), strict=True)
    return {key: float(value) for key, value, keep in zip(keys, z, inside, strict=True) if keep}


def _threshold_spans(records: PeakRecords, rows: np.ndarray, unit: float) -> list[list[Any]]:
    """Join years with the same perception threshold; years that would show any flood are left out."""
    order = rows[np.argsort(records.water_year[rows], kind="stable")]
    spans: list[list[Any]] = []
    for row in order:
        low, high = records.perception_low[row] / unit, records.perception_high[row] / unit
        year = int(records.water_year[row])
        bounds = round_values(np.array([low, high]))
        if low <= 0 and not np.isfinite(high):
            continue
        if spans and spans[-1][2:] == bounds and year - spans[-1][1] <= 1:
            spans[-1][1] = year
        else:
            spans.append([year, year, *bounds])
    return spans


def members_of_pools(tables: Mapping[str, Table]) -> dict[str, str]:
    """Wording of a pool: gauges, verdict, distribution."""
    if "pool_tests" not in tables:
        return {}
    chosen: dict[str, str] = {}
    if "pool_distributions" in tables:
        fits = tables["pool_distributions"].frame
        fits = fits[fits["chosen"].eq(True)]
        chosen = dict(zip(fits["pool"].astype(str), fits["distribution"].astype(str), strict=True))
    found = {}
    for row in tables["pool_tests"].frame.to_dict("records"):
        pool = str(row["pool"])
        parts = [f"{int(row['n_gauges'])} gauges, {int(row['station_years'])} station-years"]
        if pd.notna(row["h1"]):
            parts.append(
                f"H1 {row['h1']:.2f} ({str(row['verdict']).partition(';')[0].replace('_', ' ')})".replace(
                    "-", "\u2212"
                )
            )
        if pool in chosen:
            parts.append(f"distribution {chosen[pool]}")
        found[pool] = "; ".join(parts)
    return found
