"""The data inside the page: what the map, the site panel and the calculator need, as one JSON document."""

from __future__ import annotations

import json
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from scipy.special import ndtri, stdtrit

from wrackline.hydrology.records import PeakRecords
from wrackline.report.map_views import map_views
from wrackline.report.maps import central_longitude, group_look, unwrap
from wrackline.report.rounding import format_aep, format_unit
from wrackline.report.site_details import (
    flood_curves,
    gauge_facts,
    members_of_pools,
    peaks_of_gauges,
    round_values,
    site_notes,
)
from wrackline.report.style import RISING, TWO_SIDED
from wrackline.study.config import StudyConfig
from wrackline.study.gis import Layer
from wrackline.study.tables import Table

OUTLINE_STEPS = 1200
"""Outlines are simplified to one part in this many of the map's width: about a pixel."""
GRID = 1e-4
"""Degrees: coordinates of outlines are whole multiples of it (about 10 m)."""
MODEL_DIGITS = 12
"""Significant digits of the models' numbers; the calculator is held to six."""


def build_page_data(
    config: StudyConfig,
    tables: Mapping[str, Table],
    models: Mapping[str, dict[str, Any]],
    gauges: pd.DataFrame,
    targets: pd.DataFrame,
    records: PeakRecords,
    layers: Mapping[str, Layer],
    skew_map: Path | None = None,
) -> dict[str, Any]:
    """Gather what the page's scripts show; a study without some stage gives a document without its parts.

    Parameters
    ----------
    tables, models : mappings by name
        What the stages publish.
    gauges, targets : DataFrame
        Sites as the intake wrote them.
    records : PeakRecords
        Of all gauges, m3/s.
    layers : mapping of str to Layer
        The study's map layers.
    skew_map : Path, optional
        GeoTIFF of generalized skew and its mean square error.
    """
    centre = central_longitude(np.concatenate([gauges["longitude"], targets["longitude"]]).astype(float))
    aeps = sorted({*config.aeps.gauges, *config.aeps.targets}, reverse=True)
    labels, facts = gauge_facts(config, tables)
    return {
        "units": {
            "flow": format_unit(config.units.flow),
            "area": format_unit(config.units.area),
            "flow_in_m3s": config.flow_in_m3s,
            "area_in_km2": config.area_in_km2,
        },
        "confidence": config.confidence,
        "aeps": [{"p": aep, "z": round(float(-ndtri(aep)), 4), "text": format_aep(aep)} for aep in aeps],
        "sites": _sites(config, gauges, targets, layers, models, centre),
        "views": map_views(config, tables, layers),
        "palettes": {"two_sided": TWO_SIDED, "rising": RISING},
        "looks": [group_look(number) for number in range(24)],
        "floods": {
            **flood_curves(tables.get("gauge_estimates"), "gauge_id", "source"),
            **{
                "t:" + site: found
                for site, found in flood_curves(tables.get("target_estimates"), "target_id", "route").items()
            },
        },
        "peaks": peaks_of_gauges(config, records, tables),
        "fact_labels": labels,
        "facts": facts,
        "notes": site_notes(tables),
        "pools": members_of_pools(tables),
        "outlines": {
            name: _outlines(layers.get(name), key, centre)
            for name, key in (("basins", "site_id"), ("regions", "region"))
        },
        "skew": _skew_grid(skew_map, centre),
        "calculator": _calculator(models),
    }


def embed_json(content: Any) -> str:
    """Render JSON for a script element of the page: no character in it can end the element or open another."""
    text = json.dumps(content, ensure_ascii=False, separators=(",", ":"), allow_nan=False)
    for character, code in (
        ("<", "\\u003c"),
        (">", "\\u003e"),
        ("&", "\\u0026"),
        ("\u2028", "\\u2028"),
        ("\u2029", "\\u2029"),
    ):
        text = text.replace(character, code)
    return text


def _sites(
    config: StudyConfig,
    gauges: pd.DataFrame,
    targets: pd.DataFrame,
    layers: Mapping[str, Layer],
    models: Mapping[str, dict[str, Any]],
    centre: float,
) -> dict[str, list[Any]]:
    """Gauges, then targets, as columns; ``kind`` is g or t."""
    used = layers["gauges"].frame.set_index("gauge_id")["standing"].eq("used")
    pools = layers["gauges"].frame.set_index("gauge_id")
    pool_of = pools["pool"].to_dict() if "pool" in pools else {}
    home = models.get("saved_models", {}).get("home", {})
    columns: dict[str, list[Any]] = {
        name: [] for name in ("kind", "id", "name", "lon", "lat", "area", "region", "pool", "used")
    }
    for kind, key, frame in (("g", "gauge_id", gauges), ("t", "target_id", targets)):
        ids = frame[key].astype(str).tolist()
        columns["kind"] += [kind] * len(ids)
        columns["id"] += ids
        columns["name"] += [_text(value) for value in frame["name"]]
        columns["lon"] += np.round(unwrap(frame["longitude"].to_numpy(dtype=float), centre), 5).tolist()
        columns["lat"] += np.round(frame["latitude"].to_numpy(dtype=float), 5).tolist()
        columns["area"] += round_values(frame["area_km2"].to_numpy(dtype=float) / config.area_in_km2)
        columns["region"] += [_text(value) for value in frame["region"]]
        region = dict(zip(ids, columns["region"][-len(ids) :] if ids else [], strict=True))
        columns["pool"] += [
            _text(pool_of.get(site, "")) if kind == "g" else _text(home.get(site, region[site]))
            for site in ids
        ]
        columns["used"] += [bool(used.get(site, True)) for site in ids] if kind == "g" else [True] * len(ids)
    return columns


def _outlines(layer: Layer | None, key: str, centre: float) -> list[list[Any]]:
    """Rings of polygons, ``[name, [x, y, dx, dy, ...]]`` in whole steps of `GRID`, simplified to about a pixel."""
    if layer is None or layer.frame.empty:
        return []
    shapes = layer.frame.geometry
    west, south, east, north = shapes.total_bounds
    simple = shapes.simplify(max(east - west if east - west < 180 else 1.0, north - south) / OUTLINE_STEPS)
    found: list[list[Any]] = []
    for name, shape in zip(layer.frame[key].astype(str), simple, strict=True):
        for part in getattr(shape, "geoms", [shape]):
            if part is None or part.is_empty:
                continue
            ring = np.asarray(part.exterior.coords)[:, :2]
            steps = np.round(np.column_stack([unwrap(ring[:, 0], centre), ring[:, 1]]) / GRID).astype(
                np.int64
            )
            found.append([name, np.vstack([steps[:1], np.diff(steps, axis=0)]).ravel().tolist()])
    return found


def _skew_grid(path: Path | None, centre: float) -> dict[str, Any] | None:
    """The skew map as rows from north to south; None where the study has none or the map is blank."""
    if path is None or not path.is_file():
        return None
    import rasterio

    with rasterio.open(path) as raster:
        bands = raster.read([1, 2], masked=True).astype(float).filled(np.nan)
        west, north, cell = raster.transform.c, raster.transform.f, raster.transform.a
    if not np.isfinite(bands[0]).any():
        return None
    west = float(unwrap(np.array([west + cell / 2]), centre)[0]) - cell / 2
    return {
        "west": round(west, 9),
        "north": round(north, 9),
        "cell": round(cell, 9),
        "rows": bands.shape[1],
        "columns": bands.shape[2],
        "skew": round_values(bands[0].ravel(), 3),
        "mse": round_values(bands[1].ravel(), 3),
    }


def _calculator(models: Mapping[str, dict[str, Any]]) -> dict[str, Any] | None:
    """The saved models with Student's t for their degrees of freedom; None where the study saved none."""
    saved = models.get("saved_models")
    if saved is None:
        return None
    content = {key: value for key, value in saved.items() if key not in ("diagnostics",)}
    freedoms = {saved["index_flood"]["degrees_of_freedom"]}
    if saved["quantiles"]:
        freedoms.add(saved["quantiles"]["degrees_of_freedom"])
    probability = 0.5 + saved["settings"]["confidence"] / 2
    content["t"] = {str(freedom): float(stdtrit(freedom, probability)) for freedom in sorted(freedoms)}
    skew = models.get("skew_model")
    if skew is not None:
        content["skew_model"] = skew
    return _shorten(content)


def _shorten(value: Any) -> Any:
    """Drop what the calculator does not read, and digits beyond `MODEL_DIGITS`."""
    if isinstance(value, dict):
        return {
            key: _shorten(part)
            for key, part in value.items()
            if key not in ("diagnostics", "own_coefficients", "gauges_in_model")
        }
    if isinstance(value, list):
        return [_shorten(part) for part in value]
    return float(f"{value:.{MODEL_DIGITS}g}") if isinstance(value, float) else value


def _text(value: Any) -> str:
    return value if isinstance(value, str) else ""
