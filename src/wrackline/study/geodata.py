"""Polygons of basins and regions: read, checked, measured, and asked which region holds a site."""

from __future__ import annotations

import warnings
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

from wrackline.study.csv_files import is_readable
from wrackline.study.faults import FaultLog
from wrackline.study.vocabulary import nearest_word

if TYPE_CHECKING:
    from geopandas import GeoDataFrame

AREA_WARNING, AREA_PROBLEM = 0.10, 0.50
"""Relative difference of polygon and stated area.

Areas of one basin from maps and from elevation models commonly differ by a few per cent; beyond 10 % one of
the two is usually wrong. Half as much again, or half, is another basin or another unit."""
OUTLET_KM = 2.0
"""Distance of an outlet from its basin's polygon that generalised lines and rounded coordinates explain."""


def read_polygons(path: Path, file: str, layer: str, column: str, log: FaultLog) -> GeoDataFrame | None:
    """Read one layer of polygons as columns ``column`` and ``geometry`` in EPSG:4326; None when unusable.

    Faulty polygons are reported and left out; the rest comes back sorted.
    """
    if not is_readable(path, file, log):
        return None
    import geopandas

    frame = _read_layer(path, file, layer, log)
    if frame is None:
        return None
    if column not in frame:
        near = nearest_word(column, [str(name) for name in frame.columns])
        mend = f"Is it '{near}'? Then rename that." if near else "Add it."
        log.problem("missing_column", file, f"Layer '{layer}' lacks this column.", mend, column=column)
        return None
    if frame.crs is None:
        mend = "Assign the one in which the polygons were drawn and save again."
        log.problem("no_crs", file, f"Layer '{layer}' does not say its coordinate reference system.", mend)
        return None
    names = ["" if pd.isna(name) else str(name).strip() for name in frame[column]]
    frame = geopandas.GeoDataFrame({column: names}, geometry=frame.geometry.to_numpy(), crs=frame.crs)
    good = _shapes_are_fair(frame, file, column, log)
    frame = frame[good].to_crs(4326)
    return frame.sort_values(column, kind="stable").reset_index(drop=True)


def _read_layer(path: Path, file: str, layer: str, log: FaultLog) -> GeoDataFrame | None:
    """Read a layer as it is; what the library remarks on the file becomes a warning of the study."""
    import geopandas
    import pyogrio
    from pyogrio.errors import DataLayerError, DataSourceError, FeatureError, GeometryError

    with warnings.catch_warnings(record=True) as remarks:
        warnings.simplefilter("always")
        try:
            layers = [str(name) for name, _ in pyogrio.list_layers(path)]
            frame = geopandas.read_file(path, layer=layer) if layer in layers else None
        except (DataSourceError, DataLayerError, FeatureError, GeometryError, ValueError):
            log.problem(
                "not_geodata", file, "The file cannot be read as geodata.", "Save the polygons as GeoPackage."
            )
            return None
    for remark in sorted({str(remark.message).replace(str(path), file) for remark in remarks}):
        log.warning("odd_geodata", file, f"The file was read with a remark: {remark.rstrip('.')}.")
    if frame is None:
        problem = f"There is no layer '{layer}'; the file has {', '.join(layers) or 'none'}."
        log.problem("unknown_layer", file, problem, f"Name the layer of polygons '{layer}'.", value=layer)
    elif not isinstance(frame, geopandas.GeoDataFrame):
        log.problem("no_shapes", file, f"Layer '{layer}' holds no shapes.", "Save the polygons with it.")
        return None
    return frame


def _shapes_are_fair(frame: GeoDataFrame, file: str, column: str, log: FaultLog) -> np.ndarray:
    import shapely

    shapes = frame.geometry.to_numpy()
    reasons = shapely.is_valid_reason(shapes)
    good = np.ones(len(frame), dtype=bool)
    for number, (name, shape) in enumerate(zip(frame[column], shapes, strict=True)):
        place: dict[str, Any] = {"column": column, "value": name or None}
        good[number] = False
        if not name:
            log.problem("blank", file, f"Polygon {number + 1} has no {column}.", "Name it.", **place)
        elif shape is None or shape.is_empty:
            log.problem("empty_polygon", file, "The polygon is empty.", "Draw it, or take it out.", **place)
        elif shape.geom_type not in ("Polygon", "MultiPolygon"):
            problem = f"A polygon is expected, this is a {shape.geom_type}."
            log.problem("not_a_polygon", file, problem, "Save the layer as polygons.", **place)
        elif reasons[number] != "Valid Geometry":
            problem = f"The polygon is invalid: {reasons[number]}."
            log.problem(
                "invalid_polygon",
                file,
                problem,
                "Repair it ('fix geometries' in a GIS) and look at it.",
                **place,
            )
        else:
            good[number] = True
    return good


def check_basins(basins: GeoDataFrame, file: str, site_ids: Sequence[str], log: FaultLog) -> GeoDataFrame:
    """Return the basins of the study's own sites, one polygon each."""
    known = set(site_ids)
    bare = {name.lstrip("0"): name for name in site_ids if name.isdigit()}
    doubled = basins["site_id"].duplicated()
    for name, again in zip(basins["site_id"], doubled, strict=True):
        place: dict[str, Any] = {"column": "site_id", "value": name}
        if name not in known and name.isdigit() and name.lstrip("0") in bare:
            problem = "No such site is known; leading zeros seem to be lost or added."
            log.problem("lost_leading_zeros", file, problem, f"Is it '{bare[name.lstrip('0')]}'?", **place)
        elif name not in known:
            near = nearest_word(name, site_ids) if len(site_ids) <= 5000 else None
            mend = f"Did you mean '{near}'?" if near else ""
            problem = "The polygon belongs to no gauge or target of the study and is not used."
            log.warning("unknown_site", file, problem, mend, **place)
        elif again:
            problem = "The site has more than one polygon."
            log.problem(
                "duplicate_polygon", file, problem, "Join its parts into one, or keep the right one.", **place
            )
    return basins[basins["site_id"].isin(known) & ~doubled].reset_index(drop=True)


def measure_basins(basins: GeoDataFrame) -> pd.DataFrame:
    """Return area (km2) and centroid (degrees) of every basin, measured in an equal-area projection.

    Lambert's azimuthal equal-area projection about the middle of all basins; indexed by site.
    """
    import geopandas

    middle = _equal_area_about(basins)
    flat = basins.geometry.to_crs(middle)
    centroid = geopandas.GeoSeries(flat.centroid, crs=middle).to_crs(4326)
    return pd.DataFrame(
        {
            "area_km2": flat.area.to_numpy() / 1e6,
            "centroid_latitude": centroid.y.to_numpy(),
            "centroid_longitude": centroid.x.to_numpy(),
        },
        index=basins["site_id"].to_numpy(),
    )


def _equal_area_about(basins: GeoDataFrame) -> str:
    west, south, east, north = basins.total_bounds
    return f"+proj=laea +lat_0={(south + north) / 2} +lon_0={(west + east) / 2} +datum=WGS84 +units=m"


def compare_outlets(
    basins: GeoDataFrame, sites: pd.DataFrame, id_column: str, file: str, log: FaultLog
) -> None:
    """Warn of sites that lie clearly off their own basin's polygon."""
    import geopandas

    placed = sites[sites["latitude"].notna() & sites["longitude"].notna()]
    paired = placed.merge(basins, left_on=id_column, right_on="site_id")
    if paired.empty:
        return
    plane = _equal_area_about(basins)
    points = geopandas.points_from_xy(paired["longitude"], paired["latitude"], crs=4326)
    outlets = geopandas.GeoSeries(points).to_crs(plane)
    shapes = geopandas.GeoSeries(paired["geometry"].to_numpy(), crs=4326).to_crs(plane)
    off_km = outlets.distance(shapes).to_numpy() / 1e3
    allowed_km = np.maximum(OUTLET_KM, 0.1 * np.sqrt(shapes.area.to_numpy() / 1e6))
    for at in np.flatnonzero(off_km > allowed_km):
        log.warning(
            "outlet_off_basin",
            file,
            f"The site lies {off_km[at]:.3g} km outside its own basin's polygon.",
            "Check its coordinates and the polygon's site_id.",
            row=paired["row"].iloc[at],
            column=id_column,
            value=paired[id_column].iloc[at],
        )


def compare_areas(
    measures: pd.DataFrame, sites: pd.DataFrame, id_column: str, file: str, unit: str, log: FaultLog
) -> None:
    """Report sites whose stated area contradicts that of their polygon."""
    polygon_area = measures["area_km2"].to_dict()
    for name, area, row in zip(sites[id_column], sites["area_km2"], sites["row"], strict=True):
        polygon = polygon_area.get(name, np.nan)
        if not abs(polygon / area - 1) > AREA_WARNING:
            continue
        ratio = polygon / area
        far = max(ratio, 1 / ratio) - 1 > AREA_PROBLEM
        mend = "Check the polygon and the area."
        if min(abs(ratio * 1.609344**2 - 1), abs(ratio / 1.609344**2 - 1)) < AREA_WARNING:
            mend = f"The ratio is that of square miles to square kilometres: is `units.area: {unit}` right?"
        (log.problem if far else log.warning)(
            "area_contradicts_polygon",
            file,
            f"The stated area is {area:.4g} km2, the polygon's {polygon:.4g} km2 ({100 * (ratio - 1):+.0f} %).",
            mend,
            row=row,
            column="area",
            value=name,
        )


def region_of_sites(
    regions: GeoDataFrame, sites: pd.DataFrame, id_column: str, file: str, log: FaultLog
) -> list[str]:
    """Return the region whose polygon holds each site (its outlet); blank where none does."""
    import geopandas

    placed = sites["latitude"].notna() & sites["longitude"].notna()
    points = geopandas.GeoDataFrame(
        {"site": np.flatnonzero(placed)},
        geometry=geopandas.points_from_xy(sites.loc[placed, "longitude"], sites.loc[placed, "latitude"]),
        crs=4326,
    )
    found = (
        points.sjoin(regions, predicate="intersects")[["site", "region"]]
        .drop_duplicates()
        .sort_values(["site", "region"])
    )
    out = [""] * len(sites)
    for site, group in found.groupby("site")["region"]:
        out[int(site)] = group.iloc[0]
        if len(group) > 1:
            log.problem(
                "in_two_regions",
                file,
                f"The site lies in the polygons of {' and '.join(group)}.",
                "Let regions touch, not overlap.",
                row=sites["row"].iloc[int(site)],
                column=id_column,
                value=sites[id_column].iloc[int(site)],
            )
    return out
