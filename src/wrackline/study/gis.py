"""The study as map layers: one GeoPackage with units inside, and a style beside it for every layer."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

from wrackline.study.tables import Column, read_table

if TYPE_CHECKING:
    import geopandas as gpd

CRS = "EPSG:4326"
COLUMN_LAYER = "columns"


@dataclass(frozen=True)
class Layer:
    """A map layer: its rows with geometry in longitude and latitude, and what its columns mean.

    Attributes
    ----------
    frame : geopandas.GeoDataFrame
        Geometry in EPSG:4326, in the column ``geometry``.
    geometry_type : str
        One of the OGC names, ``Point``, ``MultiPolygon`` ...; needed where a layer has no rows.
    columns : tuple of Column
        Unit and meaning of every column but the geometry.
    """

    frame: gpd.GeoDataFrame
    geometry_type: str
    columns: tuple[Column, ...]

    def __post_init__(self) -> None:
        stated = [column.name for column in self.columns]
        held = [name for name in self.frame.columns if name != "geometry"]
        if stated != held:
            raise ValueError(f"layer columns {held} are not those stated, {stated}")


def point_layer(frame: pd.DataFrame, columns: tuple[Column, ...]) -> Layer:
    """Make a layer of points from the columns ``longitude`` and ``latitude`` (decimal degrees), which stay."""
    import geopandas as gpd

    points = gpd.points_from_xy(frame["longitude"], frame["latitude"], crs=CRS)
    return Layer(gpd.GeoDataFrame(_storable(frame), geometry=points), "Point", columns)


def polygon_layer(frame: pd.DataFrame, columns: tuple[Column, ...]) -> Layer:
    """Make a layer of multipolygons from a column ``wkt`` (EPSG:4326); the other columns stay."""
    import geopandas as gpd
    import shapely

    shapes = shapely.from_wkt(frame["wkt"].to_numpy(dtype=object))
    whole = [_as_multipolygon(shape) for shape in np.atleast_1d(shapes)]
    geometry = gpd.GeoSeries(whole, index=frame.index, crs=CRS)
    return Layer(
        gpd.GeoDataFrame(_storable(frame.drop(columns="wkt")), geometry=geometry), "MultiPolygon", columns
    )


def line_layer(frame: pd.DataFrame, columns: tuple[Column, ...]) -> Layer:
    """Make a layer of lines from a column ``wkt`` (EPSG:4326); the other columns stay."""
    import geopandas as gpd
    import shapely

    shapes = np.atleast_1d(shapely.from_wkt(frame["wkt"].to_numpy(dtype=object)))
    geometry = gpd.GeoSeries(list(shapes), index=frame.index, crs=CRS)
    return Layer(
        gpd.GeoDataFrame(_storable(frame.drop(columns="wkt")), geometry=geometry), "LineString", columns
    )


def read_polygons(path: Path, key: str) -> pd.DataFrame:
    """Read a table of polygons (``key``, ``wkt``) as the intake wrote it; no rows where there is none."""
    if not path.exists():
        return pd.DataFrame({key: pd.Series(dtype=str), "wkt": pd.Series(dtype=str)})
    return read_table(path, text=(key, "wkt"))[[key, "wkt"]]


def write_geopackage(path: Path, layers: Mapping[str, Layer]) -> None:
    """Write the layers in order of name, and a table ``columns`` with their units; all or nothing.

    The order of rows is that of the frames. Only the file's own time stamps differ between two writes.
    """
    import pyogrio

    path.parent.mkdir(parents=True, exist_ok=True)
    with tempfile.TemporaryDirectory(dir=path.parent, prefix=".layers.") as folder:
        part = Path(folder) / "part.gpkg"
        for name in sorted(layers):
            pyogrio.write_dataframe(
                layers[name].frame,
                part,
                layer=name,
                driver="GPKG",
                geometry_type=layers[name].geometry_type,
                append=part.exists(),
            )
        pyogrio.write_dataframe(
            _dictionary(layers), part, layer=COLUMN_LAYER, driver="GPKG", append=part.exists()
        )
        os.replace(part, path)


def _dictionary(layers: Mapping[str, Layer]) -> pd.DataFrame:
    rows = [
        (name, column.name, column.unit, column.meaning)
        for name in sorted(layers)
        for column in layers[name].columns
    ]
    return pd.DataFrame(rows, columns=["layer", "column", "unit", "meaning"], dtype=str)


def _storable(frame: pd.DataFrame) -> pd.DataFrame:
    """Give every column a type that a layer can keep: text, true or false, whole or decimal numbers."""
    return pd.DataFrame({name: _storable_column(frame[name]) for name in frame.columns}, index=frame.index)


def _storable_column(values: pd.Series) -> pd.Series:
    if values.dtype.kind in "bif":
        return values
    kept = [value for value in values if not _is_missing(value)]
    if kept and all(isinstance(value, (bool, np.bool_)) for value in kept):
        return values.astype("boolean")
    return pd.Series([None if _is_missing(v) else str(v) for v in values], index=values.index, dtype=object)


def _is_missing(value: Any) -> bool:
    return value is None or value is pd.NA or (isinstance(value, float) and np.isnan(value))


def _as_multipolygon(shape: Any) -> Any:
    import shapely

    return shapely.MultiPolygon([shape]) if shape is not None and shape.geom_type == "Polygon" else shape
