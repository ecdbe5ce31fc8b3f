"""Generalized skew at sites and on the map: what the stage `skew` evaluates once a model is chosen."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from wrackline.hydrology.distances import great_circle_km
from wrackline.hydrology.generalized_skew import generalized_skew_error_covariance
from wrackline.hydrology.records import BoolArray, FloatArray
from wrackline.hydrology.skew_candidates import Comparison
from wrackline.hydrology.skew_surface import SkewSurface
from wrackline.stages.running import StudyFiles
from wrackline.stages.skew_material import SkewMaterial, outside_ranges
from wrackline.study.config import StudyConfig
from wrackline.study.faults import FaultLog
from wrackline.study.skew_map import (
    Grid,
    cells_within_reach,
    nearest_place,
    plan_grid,
    point_membership,
    points_in_shapes,
    reach_of_gauges,
    read_shapes,
    sample_skew_tif,
)

CELLS_AT_ONCE = 2000
KM_PER_DEGREE = 111.195


@dataclass(frozen=True)
class SkewAtSites:
    """Generalized skew of all sites; arrays (sites,), NaN where there is none.

    ``left_out`` marks gauges of the model, whose values are those of the model without them; ``design`` holds
    the model's columns.
    """

    skew: FloatArray
    mse: FloatArray
    left_out: BoolArray
    outside: BoolArray
    design: FloatArray


@dataclass(frozen=True)
class SkewMap:
    """The map's grid and its two bands (rows, columns), NaN where blank; and the reach, km."""

    grid: Grid
    skew: FloatArray
    mse: FloatArray
    reach_km: float


def predict_sites(material: SkewMaterial, comparison: Comparison | None) -> SkewAtSites:
    """Give every gauge of the model its skew without itself, and every other site the model's skew at its basin."""
    m = len(material.sites)
    skew, mse = np.full(m, np.nan), np.full(m, np.nan)
    left_out = np.zeros(m, dtype=bool)
    if comparison is None:
        return SkewAtSites(skew, mse, left_out, np.zeros(m, dtype=bool), np.ones((m, 1)))
    chosen, serve = comparison.chosen, material.serve
    plan = chosen.plan
    attributes = material.attributes(plan.attributes.names)
    design = plan.design(attributes, material.shares, material.regions)
    known = np.isfinite(design).all(axis=1)
    outside = np.zeros(m, dtype=bool)
    if plan.attributes.names:
        values = design[:, 1:]
        outside = outside_ranges(values, values[serve].min(axis=0), values[serve].max(axis=0))
    place = material.sites[["latitude", "longitude"]].to_numpy()
    if isinstance(chosen.model, SkewSurface):
        skew[:], mse[:] = _average_surface(material, comparison)
    else:
        skew[known], mse[known] = chosen.predict(
            design[known], material.distance_to_serving(place[known, 0], place[known, 1])
        )
    skew[serve], mse[serve] = chosen.model.leave_one_out, chosen.model.leave_one_out_variance
    left_out[serve] = True
    return SkewAtSites(skew, mse, left_out, outside, design)


def _average_surface(material: SkewMaterial, comparison: Comparison) -> tuple[FloatArray, FloatArray]:
    """Average a surface and its mean square error over every basin's polygon; at the centroid where there is none."""
    places = material.sites[["latitude", "longitude"]].to_numpy()
    skew, mse = _predict_points(material, comparison, places[:, 0], places[:, 1], None)
    drawn = material.basins[material.basins["site_id"].isin(material.sites["site_id"])]
    if len(drawn) == 0:
        return skew, mse
    import shapely

    shapes = read_shapes(drawn, material.about)
    grid = plan_grid(tuple(shapely.total_bounds(shapes)))
    east, north = grid.centres
    inside = points_in_shapes(shapes, east, north)
    wanted = np.unique(np.concatenate([*inside, np.empty(0, dtype=np.int64)]))
    at_cells = np.full((2, len(east)), np.nan)
    at_cells[:, wanted] = _predict_points(material, comparison, north[wanted], east[wanted], None)
    number = {site: i for i, site in enumerate(material.sites["site_id"])}
    for site, cells in zip(drawn["site_id"], inside, strict=True):
        if len(cells):
            weight = np.cos(np.radians(north[cells]))
            skew[number[site]] = np.average(at_cells[0, cells], weights=weight)
            mse[number[site]] = np.average(at_cells[1, cells], weights=weight)
    return skew, mse


def _predict_points(
    material: SkewMaterial,
    comparison: Comparison,
    latitude: FloatArray,
    longitude: FloatArray,
    design: FloatArray | None,
) -> tuple[FloatArray, FloatArray]:
    """Predict at points, a block at a time; ``design`` None: the constant alone."""
    skew, mse = np.full(len(latitude), np.nan), np.full(len(latitude), np.nan)
    columns = np.ones((len(latitude), 1)) if design is None else design
    for start in range(0, len(latitude), CELLS_AT_ONCE):
        block = slice(start, start + CELLS_AT_ONCE)
        distance = material.distance_to_serving(latitude[block], longitude[block])
        skew[block], mse[block] = comparison.chosen.predict(columns[block], distance)
    return skew, mse


def _wrap(longitude: FloatArray) -> FloatArray:
    """Longitudes from -180 to 180 degrees."""
    return (longitude + 180.0) % 360.0 - 180.0


def shared_errors(material: SkewMaterial, comparison: Comparison | None, sites: SkewAtSites) -> FloatArray:
    """Covariance of the errors of the generalized skews at all gauges, (g, g), in order of identifier.

    The diagonal holds every gauge's own mean square error. Off it stands what the model's errors have in common: the error of
    its coefficients, and of a surface also that of neighbours. A given skew says nothing of that: zero.
    """
    g = material.n_gauges
    covariance = np.zeros((g, g))
    if comparison is not None:
        model, design = comparison.chosen.model, sites.design[:g]
        known = np.isfinite(design).all(axis=1)
        at = np.ix_(known, known)
        if isinstance(model, SkewSurface):
            place = material.sites[["latitude", "longitude"]].to_numpy()[:g][known]
            between = great_circle_km(place[:, :1], place[:, 1:], place[:, 0], place[:, 1])
            to_gauges = material.distance_to_serving(place[:, 0], place[:, 1])
            covariance[at] = model.error_covariance(design[known], to_gauges, between)
        else:
            covariance[at] = generalized_skew_error_covariance(model, design[known])
    np.fill_diagonal(covariance, np.nan_to_num(sites.mse[:g]))
    return covariance


def given_sites(study: StudyFiles, material: SkewMaterial, faults: FaultLog) -> SkewAtSites:
    """Take the generalized skew of every site from what the study was given."""
    settings, m = study.config.skew, len(material.sites)
    nowhere = np.zeros(m, dtype=bool)
    if settings.source == "constant":
        assert settings.given_skew is not None
        assert settings.given_mse is not None
        skew, mse = np.full(m, settings.given_skew), np.full(m, settings.given_mse)
        return SkewAtSites(skew, mse, nowhere, nowhere, np.ones((m, 1)))
    path = study.folder / settings.given_map
    place = material.sites[["latitude", "longitude"]].to_numpy()
    try:
        skew, mse = sample_skew_tif(path, place[:, 0], _wrap(place[:, 1]))
    except (OSError, ValueError) as reason:
        faults.problem(
            "given_skew_map",
            settings.given_map,
            f"the given map cannot be used: {reason}",
            "Give a GeoTIFF with band 1 skew and band 2 mean square error.",
        )
        faults.stop_on_problems()
        raise
    return SkewAtSites(skew, mse, nowhere, nowhere, np.ones((m, 1)))


def draw_map(
    config: StudyConfig,
    material: SkewMaterial,
    comparison: Comparison | None,
    sites: SkewAtSites,
    given: Path | None = None,
) -> SkewMap:
    """Evaluate the skew on a grid; blank beyond the regions' polygons and the reach of the gauges behind it.

    ``given`` is the map that the study was given, if it was.
    """
    anchors = material.serve if comparison is not None else np.arange(len(material.sites))
    place = material.sites[["latitude", "longitude"]].to_numpy()[anchors]
    reach = config.skew.map_reach_km or reach_of_gauges(place[:, 0], place[:, 1])
    tall = reach / KM_PER_DEGREE
    wide = tall / max(float(np.cos(np.radians(np.abs(place[:, 0]).max()))), 0.05)
    bounds = (
        float(place[:, 1].min() - wide),
        float(max(place[:, 0].min() - tall, -90.0)),
        float(place[:, 1].max() + wide),
        float(min(place[:, 0].max() + tall, 90.0)),
    )
    shapes = np.empty(0, dtype=object)
    if len(material.region_polygons):
        import shapely

        shapes = read_shapes(material.region_polygons, material.about)
        land = shapely.total_bounds(shapes)
        west, south = np.maximum(bounds[:2], land[:2])
        east, north = np.minimum(bounds[2:], land[2:])
        if west < east and south < north:
            bounds = (float(west), float(south), float(east), float(north))
    grid = plan_grid(bounds, config.skew.map_cell_degrees)
    shown, nearest = cells_within_reach(grid, place[:, 0], place[:, 1], reach)
    region = np.full(len(shown), -1, dtype=np.int64)
    if len(shapes):
        region = point_membership(shapes, *grid.centres)
        shown &= region >= 0
    skew, mse = np.full(len(shown), np.nan), np.full(len(shown), np.nan)
    cells = np.flatnonzero(shown)
    if comparison is not None:
        design, usable = _cell_design(
            material, comparison, sites, grid, cells, region[cells], anchors[nearest[cells]]
        )
        cells, design = cells[usable], design[usable]
        east, lat = grid.centres
        skew[cells], mse[cells] = _predict_points(material, comparison, lat[cells], east[cells], design)
    elif given is not None:
        east, lat = grid.centres
        skew[cells], mse[cells] = sample_skew_tif(given, lat[cells], _wrap(east[cells]))
    elif config.skew.source == "constant":
        skew[cells], mse[cells] = config.skew.given_skew, config.skew.given_mse
    shape = (grid.rows, grid.columns)
    return SkewMap(grid, skew.reshape(shape), mse.reshape(shape), reach)


def _cell_design(
    material: SkewMaterial,
    comparison: Comparison,
    sites: SkewAtSites,
    grid: Grid,
    cells: np.ndarray,
    polygon: np.ndarray,
    nearest_gauge: np.ndarray,
) -> tuple[FloatArray, BoolArray]:
    """Columns of the model at cells, and which cells have them.

    A region's constant holds in its polygon, or about its gauges; attributes are those of the smallest basin that
    covers the cell, else of the nearest basin, and must lie in the range of the gauges.
    """
    plan = comparison.chosen.plan
    if plan.regions:
        names = material.region_polygons["region"].tolist()
        own = [names[p] for p in polygon] if names else material.sites["region"].iloc[nearest_gauge].tolist()
        shares = np.array([[name == known for known in material.regions] for name in own], dtype=float)
        design = plan.design({}, shares.reshape(len(cells), len(material.regions)), material.regions)
        return design, np.asarray(np.isfinite(design).all(axis=1), dtype=bool)
    if not plan.attributes.names:
        return np.ones((len(cells), 1)), np.ones(len(cells), dtype=bool)
    east, north = (axis[cells] for axis in grid.centres)
    able = np.flatnonzero(np.isfinite(sites.design).all(axis=1))
    place = material.sites[["latitude", "longitude"]].to_numpy()[able]
    site = able[nearest_place(north, east, place[:, 0], place[:, 1])[0]]
    number = {name: i for i, name in enumerate(material.sites["site_id"])}
    drawn = material.basins[
        material.basins["site_id"].isin([material.sites["site_id"].iloc[i] for i in able])
    ]
    if len(drawn):
        within = point_membership(read_shapes(drawn, material.about), east, north)
        basin = np.array([number[name] for name in drawn["site_id"]], dtype=np.int64)
        site = np.where(within >= 0, basin[within], site)
    return sites.design[site], np.logical_not(sites.outside[site])
