"""The generalized skew as a map: a grid of cells, a GeoTIFF, contours, and the shares of basins in regions."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from wrackline.hydrology.distances import great_circle_km
from wrackline.hydrology.records import BoolArray, FloatArray, IntArray
from wrackline.study.tables import replacing

CELLS_ACROSS = 100
CELL_SIZES = (0.001, 0.002, 0.005, 0.01, 0.02, 0.05, 0.1, 0.2, 0.5, 1.0, 2.0)
NO_DATA = -9999.0
BANDS = ("generalized skew of log10 annual peaks", "mean square error of the generalized skew")
REACH_SHARE, REACH_FACTOR = 0.9, 2.0
CONTOUR_STEPS = (0.01, 0.02, 0.05, 0.1, 0.2, 0.5, 1.0)


@dataclass(frozen=True)
class Grid:
    """Square cells in longitude and latitude (EPSG:4326), rows from north to south.

    Attributes
    ----------
    west, north : float
        Corner, degrees; longitude may pass 180 where a study lies on both sides of it.
    cell : float
        Degrees.
    rows, columns : int
    """

    west: float
    north: float
    cell: float
    rows: int
    columns: int

    @property
    def longitude(self) -> FloatArray:
        """Of cell centres, (columns,)."""
        return np.asarray(self.west + self.cell * (np.arange(self.columns) + 0.5), dtype=float)

    @property
    def latitude(self) -> FloatArray:
        """Of cell centres, (rows,)."""
        return np.asarray(self.north - self.cell * (np.arange(self.rows) + 0.5), dtype=float)

    @property
    def centres(self) -> tuple[FloatArray, FloatArray]:
        """Longitude and latitude of every cell, row by row."""
        longitude, latitude = np.meshgrid(self.longitude, self.latitude)
        return longitude.ravel(), latitude.ravel()


def unwrap(longitude: FloatArray, about: float) -> FloatArray:
    """Return longitudes within 180 degrees of ``about``."""
    return (np.asarray(longitude, dtype=float) - about + 180.0) % 360.0 - 180.0 + about


def reach_of_gauges(latitude: FloatArray, longitude: FloatArray) -> float:
    """Distance from the gauges up to which the map is drawn, km: twice that within which 90 % of them have a neighbour."""
    if len(latitude) < 2:
        return 50.0
    nearest = np.empty(len(latitude))
    for i in range(len(latitude)):
        d = great_circle_km(latitude[i], longitude[i], latitude, longitude)
        d[i] = np.inf
        nearest[i] = d.min()
    return float(REACH_FACTOR * np.quantile(nearest, REACH_SHARE))


def plan_grid(bounds: tuple[float, float, float, float], cell: float | None = None) -> Grid:
    """Lay a grid over (west, south, east, north), its lines at whole multiples of a round cell size."""
    west, south, east, north = bounds
    if cell is None:
        wanted = max(east - west, north - south, 1e-6) / CELLS_ACROSS
        cell = min((size for size in CELL_SIZES if size >= wanted), default=CELL_SIZES[-1])
    first, last = np.floor(west / cell), np.ceil(east / cell)
    top, bottom = np.ceil(north / cell), np.floor(south / cell)
    # Rounded, so that the corner reads as it is meant: 0.05 times 2979 is not quite 148.95.
    corner = float(np.round(first * cell, 9)), float(np.round(top * cell, 9))
    return Grid(*corner, cell, int(max(top - bottom, 1)), int(max(last - first, 1)))


def cells_within_reach(
    grid: Grid, latitude: FloatArray, longitude: FloatArray, reach_km: float
) -> tuple[BoolArray, IntArray]:
    """Tell which cell centres lie within the reach of a place, and the nearest place of every cell."""
    east, north = grid.centres
    nearest, distance = nearest_place(north, east, latitude, longitude)
    return distance <= reach_km, nearest


def nearest_place(
    latitude: FloatArray, longitude: FloatArray, to_latitude: FloatArray, to_longitude: FloatArray
) -> tuple[IntArray, FloatArray]:
    """Return the number of the nearest of some places to every point, and its distance in km."""
    from scipy.spatial import cKDTree

    _, nearest = cKDTree(_on_sphere(to_latitude, to_longitude)).query(_on_sphere(latitude, longitude))
    return nearest, great_circle_km(latitude, longitude, to_latitude[nearest], to_longitude[nearest])


def _on_sphere(latitude: FloatArray, longitude: FloatArray) -> FloatArray:
    phi, lam = np.radians(latitude), np.radians(longitude)
    return np.column_stack([np.cos(phi) * np.cos(lam), np.cos(phi) * np.sin(lam), np.sin(phi)])


def read_shapes(polygons: pd.DataFrame, about: float) -> np.ndarray:
    """Return valid shapes from a column ``wkt``, with longitudes near ``about``."""
    import shapely

    shapes = shapely.from_wkt(polygons["wkt"].to_numpy(dtype=object))
    shapes = shapely.transform(shapes, lambda xy: np.column_stack([unwrap(xy[:, 0], about), xy[:, 1]]))
    shapes = np.atleast_1d(shapes)
    return np.where(shapely.is_valid(shapes), shapes, shapely.make_valid(shapes))


def point_membership(shapes: np.ndarray, longitude: FloatArray, latitude: FloatArray) -> IntArray:
    """Return the number of the smallest shape that covers every point; -1: none."""
    import shapely

    found = np.full(len(longitude), -1, dtype=np.int64)
    if len(shapes) == 0:
        return found
    tree = shapely.STRtree(shapely.points(longitude, latitude))
    # The largest first, so that the smallest has the last word.
    order = np.argsort(-shapely.area(shapes), kind="stable")
    for number in order:
        found[tree.query(shapes[number], predicate="covers")] = number
    return found


def points_in_shapes(shapes: np.ndarray, longitude: FloatArray, latitude: FloatArray) -> list[IntArray]:
    """Return the numbers of the points that every shape covers, ascending."""
    import shapely

    tree = shapely.STRtree(shapely.points(longitude, latitude))
    return [np.sort(tree.query(shape, predicate="covers")) for shape in shapes]


def region_shares(
    site_ids: Sequence[str],
    region_of_site: Sequence[str],
    regions: Sequence[str],
    basins: pd.DataFrame,
    region_polygons: pd.DataFrame,
    about: float,
) -> FloatArray:
    """Return the share of every site's basin in every region, (sites, regions); a row of zeros: in none.

    The shares are areas of the basin's polygon within the regions' polygons where both exist and the region
    that the study gives the site is the one with the largest share; otherwise the site belongs wholly to the
    region that the study gives it.
    """
    import shapely

    number = {region: i for i, region in enumerate(regions)}
    shares = np.zeros((len(site_ids), len(regions)))
    for i, region in enumerate(region_of_site):
        if region in number:
            shares[i, number[region]] = 1.0
    known = region_polygons[region_polygons["region"].isin(number)]
    mine = {site: i for i, site in enumerate(site_ids)}
    drawn = basins[basins["site_id"].isin(mine)]
    if len(known) == 0 or len(drawn) == 0:
        return shares
    basin_shapes, region_shapes = read_shapes(drawn, about), read_shapes(known, about)
    basin, region = shapely.STRtree(region_shapes).query(basin_shapes, predicate="intersects")
    # Within one basin a degree is as good as a square kilometre: only the ratio of areas counts.
    area = shapely.area(shapely.intersection(basin_shapes[basin], region_shapes[region]))
    table = np.zeros((len(drawn), len(regions)))
    columns = np.array([number[name] for name in known["region"]], dtype=np.int64)
    np.add.at(table, (basin, columns[region]), area)
    for row, site in zip(table, drawn["site_id"], strict=True):
        i = mine[site]
        if row.sum() > 0 and shares[i, row.argmax()] == 1.0:
            shares[i] = row / row.sum()
    return shares


def write_skew_tif(path: Path, grid: Grid, skew: FloatArray, mse: FloatArray) -> None:
    """Write a GeoTIFF: band 1 skew, band 2 mean square error, float32, -9999 where blank; equal data give equal bytes.

    ``skew`` and ``mse`` (rows, columns) hold NaN where the map is blank.
    """
    import rasterio
    from rasterio.io import MemoryFile

    profile: dict[str, Any] = {
        "driver": "GTiff",
        "width": grid.columns,
        "height": grid.rows,
        "count": 2,
        "dtype": "float32",
        "crs": rasterio.crs.CRS.from_epsg(4326),
        "transform": rasterio.Affine(grid.cell, 0.0, grid.west, 0.0, -grid.cell, grid.north),
        "nodata": NO_DATA,
        "compress": "deflate",
    }
    with MemoryFile() as memory:
        with memory.open(**profile) as tif:
            for band, (values, meaning) in enumerate(zip((skew, mse), BANDS, strict=True), start=1):
                tif.write(np.where(np.isfinite(values), values, NO_DATA).astype("float32"), band)
                tif.set_band_description(band, meaning)
        content = bytes(memory.getbuffer())
    with replacing(path) as part:
        part.write_bytes(content)


def sample_skew_tif(path: Path, latitude: FloatArray, longitude: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return skew and mean square error of a given map at places; NaN where it is blank or does not reach.

    Raises
    ------
    ValueError
        When the file has not two bands or no coordinate system.
    """
    import rasterio
    from rasterio.warp import transform

    with rasterio.open(path) as tif:
        if tif.count < 2:
            raise ValueError("it has one band; band 1 is the skew, band 2 its mean square error")
        if tif.crs is None:
            raise ValueError("it has no coordinate system")
        x, y = transform("EPSG:4326", tif.crs, list(longitude), list(latitude))
        bands = tif.read([1, 2], masked=True).astype(float).filled(np.nan)
        a, b, c, d, e, f = tif.transform[:6]
    across, down = np.asarray(x, dtype=float) - c, np.asarray(y, dtype=float) - f
    column = np.floor((e * across - b * down) / (a * e - b * d)).astype(np.int64)
    row = np.floor((a * down - d * across) / (a * e - b * d)).astype(np.int64)
    inside = (row >= 0) & (row < bands.shape[1]) & (column >= 0) & (column < bands.shape[2])
    values = np.full((2, len(row)), np.nan)
    values[:, inside] = bands[:, row[inside], column[inside]]
    unusable = ~(np.isfinite(values).all(axis=0) & (values[1] > 0))
    values[:, unusable] = np.nan
    return values[0], values[1]


def cell_table(grid: Grid, skew: FloatArray, mse: FloatArray) -> pd.DataFrame:
    """Return the cells with a value as polygons: cell, skew, mse, wkt."""
    import shapely

    row, column = np.nonzero(np.isfinite(skew))
    west, north = grid.west + column * grid.cell, grid.north - row * grid.cell
    boxes = shapely.box(
        np.round(west, 9), np.round(north - grid.cell, 9), np.round(west + grid.cell, 9), np.round(north, 9)
    )
    return pd.DataFrame(
        {
            "cell": [f"r{r + 1:03d}c{c + 1:03d}" for r, c in zip(row, column, strict=True)],
            "skew": skew[row, column],
            "mse": mse[row, column],
            "wkt": shapely.to_wkt(boxes, rounding_precision=9) if len(row) else [],
        }
    )


def contour_table(grid: Grid, skew: FloatArray) -> pd.DataFrame:
    """Return lines of equal skew: skew, wkt; none where the map is level."""
    import shapely
    from contourpy import contour_generator

    rows = []
    finite = skew[np.isfinite(skew)]
    if len(finite) and np.ptp(finite) > 1e-6 and min(skew.shape) > 1:
        low, high = float(finite.min()), float(finite.max())
        step = min((s for s in CONTOUR_STEPS if s >= (high - low) / 12), default=CONTOUR_STEPS[-1])
        lines = contour_generator(grid.longitude, grid.latitude, np.ma.masked_invalid(skew))
        for level in np.arange(np.ceil(low / step), np.floor(high / step) + 1) * step:
            for line in lines.lines(float(level)):
                if len(line) > 1:
                    text = shapely.to_wkt(shapely.LineString(line), rounding_precision=6)
                    rows.append((float(np.round(level, 6)), text))
    return pd.DataFrame({"skew": [level for level, _ in rows], "wkt": [text for _, text in rows]}).astype(
        {"skew": float, "wkt": object}
    )
