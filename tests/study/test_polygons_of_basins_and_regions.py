"""Polygons: what is told of bad ones, and what is measured on good ones."""

from __future__ import annotations

import math
from collections.abc import Callable
from pathlib import Path
from typing import Any

import geopandas
import numpy as np
import pytest
from shapely.geometry import MultiPolygon, Point, Polygon, box

from wrackline.study.checking import check
from wrackline.study.inputs import read_study

KM_PER_DEGREE = math.pi * 6371.0 / 180


def square(latitude: float, longitude: float, area_km2: float) -> Polygon:
    half = math.sqrt(area_km2) / 2 / KM_PER_DEGREE
    wide = half / math.cos(math.radians(latitude))
    return box(longitude - wide, latitude - half, longitude + wide, latitude + half)


def basins(study: Any, **changes: Any) -> dict[str, Any]:
    """Squares of the stated areas about every gauge, with some replaced."""
    head, *rows = study.tables["gauges.csv"]
    at = {name: head.index(name) for name in ("gauge_id", "latitude", "longitude", "area")}
    shapes = {
        row[at["gauge_id"]]: square(*(float(row[at[name]]) for name in ("latitude", "longitude", "area")))
        for row in rows
    }
    return shapes | changes


def layer(
    column: str, names: list[str], shapes: list[Any], name: str, crs: int | None = 4326
) -> Callable[[Path], None]:
    def draw(path: Path) -> None:
        frame = geopandas.GeoDataFrame({column: names}, geometry=shapes, crs=4326)
        frame = frame.set_crs(None, allow_override=True) if crs is None else frame.to_crs(crs)
        frame.to_file(path, layer=name, driver="GPKG")

    return draw


def with_basins(study: Any, shapes: dict[str, Any], name: str = "basins", crs: int | None = 4326) -> None:
    study.set_key("inputs:\n", "inputs:\n  basins: basins.gpkg\n")
    study.layers["basins.gpkg"] = layer("site_id", list(shapes), list(shapes.values()), name, crs)


def with_regions(study: Any, names: list[str], shapes: list[Any], crs: int = 4326) -> None:
    study.set_key("inputs:\n", "inputs:\n  regions: regions.gpkg\n")
    study.set_key("index_flood:", "pooling: {regions: polygons}\nindex_flood:")
    study.layers["regions.gpkg"] = layer("region", names, shapes, "regions", crs)


def told(study_file: Path) -> list[tuple[Any, ...]]:
    found = check(study_file)
    return [
        (f.severity, f.code, f.file, f.row, f.column, f.value) for f in (*found.problems, *found.warnings)
    ]


BOW_TIE = Polygon([(-121, 47), (-120.9, 47.1), (-120.9, 47), (-121, 47.1)])
FAULTS = [
    ("bow tie", {"00101": BOW_TIE}, ("problem", "invalid_polygon", "basins.gpkg", None, "site_id", "00101")),
    (
        "point",
        {"00101": Point(-121, 47)},
        ("problem", "not_a_polygon", "basins.gpkg", None, "site_id", "00101"),
    ),
    ("empty", {"00101": Polygon()}, ("problem", "empty_polygon", "basins.gpkg", None, "site_id", "00101")),
    (
        "unknown",
        {"X9": square(47, -121, 9)},
        ("warning", "unknown_site", "basins.gpkg", None, "site_id", "X9"),
    ),
    (
        "zeros",
        {"102": square(47, -121, 9)},
        ("problem", "lost_leading_zeros", "basins.gpkg", None, "site_id", "102"),
    ),
    (
        "a fifth larger",
        {"00101": square(47, -121, 120)},
        ("warning", "area_contradicts_polygon", "gauges.csv", 2, "area", "00101"),
    ),
    (
        "a third",
        {"00101": square(47, -121, 33)},
        ("problem", "area_contradicts_polygon", "gauges.csv", 2, "area", "00101"),
    ),
]


@pytest.mark.parametrize(
    ("changes", "expected"), [case[1:] for case in FAULTS], ids=[case[0] for case in FAULTS]
)
def test_a_bad_basin_is_told(
    changes: dict[str, Any], expected: Any, small_study: Any, tmp_path: Path
) -> None:
    with_basins(small_study, basins(small_study, **changes))
    assert [expected] == told(small_study.write(tmp_path))


def test_a_ratio_of_square_miles_points_at_the_unit(small_study: Any, tmp_path: Path) -> None:
    with_basins(small_study, basins(small_study, **{"00101": square(47, -121, 100 * 1.609344**2)}))
    found = check(small_study.write(tmp_path))
    assert ["area_contradicts_polygon"] == [f.code for f in found.problems]
    assert "units.area" in found.problems[0].mend


def test_an_outlet_far_off_its_basin_is_a_warning(small_study: Any, tmp_path: Path) -> None:
    with_basins(small_study, basins(small_study, **{"00101": square(47.2, -121, 100)}))
    found = check(small_study.write(tmp_path))
    assert [("outlet_off_basin", 2)] == [(f.code, f.row) for f in found.warnings]
    # The square reaches from 47.155 to 47.245 degrees, 0.155 degrees or 17.2 km north of the outlet.
    assert "17.2 km" in found.warnings[0].problem


def test_two_polygons_for_one_site_are_a_problem(small_study: Any, tmp_path: Path) -> None:
    shapes = basins(small_study)
    small_study.set_key("inputs:\n", "inputs:\n  basins: basins.gpkg\n")
    twice = layer("site_id", [*shapes, "00103"], [*shapes.values(), shapes["00103"]], "basins")
    small_study.layers["basins.gpkg"] = twice
    assert [("problem", "duplicate_polygon", "basins.gpkg", None, "site_id", "00103")] == told(
        small_study.write(tmp_path)
    )


def test_a_layer_of_another_name_is_told_with_the_layers_there_are(small_study: Any, tmp_path: Path) -> None:
    with_basins(small_study, basins(small_study), name="watersheds")
    found = check(small_study.write(tmp_path))
    assert ["unknown_layer"] == [f.code for f in found.problems]
    assert "watersheds" in found.problems[0].problem


@pytest.mark.filterwarnings("ignore:'crs' was not provided")
def test_polygons_without_a_reference_system_are_refused(small_study: Any, tmp_path: Path) -> None:
    with_basins(small_study, basins(small_study), crs=None)
    assert [("problem", "no_crs", "basins.gpkg", None, None, None)] == told(small_study.write(tmp_path))


def test_a_text_file_is_no_geodata(small_study: Any, tmp_path: Path) -> None:
    small_study.set_key("inputs:\n", "inputs:\n  basins: basins.gpkg\n")
    small_study.raw["basins.gpkg"] = b"not a polygon in sight"
    assert [("problem", "not_geodata", "basins.gpkg", None, None, None)] == told(small_study.write(tmp_path))


@pytest.mark.parametrize("crs", [4326, 32610], ids=["degrees", "metres"])
def test_centroids_come_from_polygons_in_any_reference_system(
    crs: int, small_study: Any, tmp_path: Path
) -> None:
    moved = MultiPolygon([square(47.20, -121.30, 50), square(47.20, -120.70, 50)])
    with_basins(small_study, basins(small_study, **{"00101": moved}), crs=crs)
    gauges = read_study(small_study.write(tmp_path)).gauges
    assert ["polygon"] * 6 == gauges["centroid_source"].tolist()
    # The chord between the two squares bends by 5e-4 degrees against the parallel; squares drawn in
    # degrees are not quite squares. A thousandth of a degree is 0.1 km.
    np.testing.assert_allclose(
        [47.20, -121.00], gauges.loc[0, ["centroid_latitude", "centroid_longitude"]].astype(float), atol=1e-3
    )


def test_regions_are_those_of_the_outlet(small_study: Any, tmp_path: Path) -> None:
    west, east = box(-122, 46, -120.5, 48), box(-120.5, 46, -119, 48)
    with_regions(small_study, ["west", "east"], [west, east], crs=32610)
    study = read_study(small_study.write(tmp_path))
    assert ["west"] * 3 + ["east"] * 3 == study.gauges["region"].tolist()
    assert ["west", "east"] == study.targets["region"].tolist()


def test_a_region_may_have_several_polygons(small_study: Any, tmp_path: Path) -> None:
    west, east = box(-122, 46, -120.5, 48), box(-120.5, 46, -119, 48)
    with_regions(small_study, ["all", "all"], [west, east])
    assert ["all"] == sorted(set(read_study(small_study.write(tmp_path)).gauges["region"]))


def test_a_site_on_no_or_on_two_polygons_is_told(small_study: Any, tmp_path: Path) -> None:
    with_regions(small_study, ["west", "more"], [box(-122, 46, -120.3, 48), box(-120.9, 46.5, -120.7, 47.15)])
    assert [
        ("problem", "in_two_regions", "gauges.csv", 3, "gauge_id", "00102"),
        ("problem", "target_without_region", "targets.csv", 3, "target_id", None),
        ("warning", "gauge_without_region", "gauges.csv", 6, "gauge_id", None),
        ("warning", "gauge_without_region", "gauges.csv", 7, "gauge_id", None),
    ] == told(small_study.write(tmp_path))


def test_polygons_as_regions_need_their_file(small_study: Any, tmp_path: Path) -> None:
    small_study.set_key("index_flood:", "pooling: {regions: polygons}\nindex_flood:")
    assert ("problem", "missing_file", "study.yaml", 14, "inputs.regions", None) in told(
        small_study.write(tmp_path)
    )
