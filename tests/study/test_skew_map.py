"""The skew map: its grid, what is blank, the GeoTIFF's bytes and bands, contours, cells, basins across regions."""

import numpy as np
import pandas as pd
import pytest
import shapely

from wrackline.study.skew_map import (
    Grid,
    cell_table,
    cells_within_reach,
    contour_table,
    plan_grid,
    point_membership,
    reach_of_gauges,
    region_shares,
    sample_skew_tif,
    unwrap,
    write_skew_tif,
)

GRID = Grid(west=-120.0, north=46.0, cell=0.5, rows=4, columns=6)


def sloping():
    """A skew that rises by 0.1 a degree eastwards; the first row is blank."""
    skew = np.tile(0.1 * (GRID.longitude + 120.0), (4, 1))
    skew[0] = np.nan
    return skew


def test_grid_lines_lie_at_round_degrees_and_cover_the_bounds():
    grid = plan_grid((-148.93, 38.87, -145.11, 41.03))
    assert (-148.95, 41.05, 0.05) == (grid.west, grid.north, grid.cell)
    assert grid.west + grid.cell * grid.columns >= -145.11
    assert grid.north - grid.cell * grid.rows <= 38.87
    assert plan_grid((0, 0, 1, 1), 0.25).rows == 4
    assert (1, 1) == (plan_grid((5, 5, 5, 5)).rows, plan_grid((5, 5, 5, 5)).columns)


def test_cells_beyond_the_reach_of_every_gauge_are_blank():
    shown, nearest = cells_within_reach(GRID, np.array([45.25]), np.array([-119.75]), 60.0)
    shown = shown.reshape(4, 6)
    assert shown[1, 0]
    assert not shown[:, 4:].any()
    assert set(nearest) == {0}


def test_reach_is_twice_the_usual_distance_to_a_neighbour():
    latitude, longitude = np.full(11, 45.0), np.arange(11) * 0.1
    expected = 2 * 0.1 * 111.195 * np.cos(np.radians(45.0))
    assert expected == pytest.approx(reach_of_gauges(latitude, longitude), rel=1e-3)


def test_geotiff_has_two_named_bands_a_blank_value_and_the_same_bytes_twice(tmp_path):
    import rasterio

    mse = np.where(np.isfinite(sloping()), 0.2, np.nan)
    for name in ("one.tif", "two.tif"):
        write_skew_tif(tmp_path / name, GRID, sloping(), mse)
    assert (tmp_path / "one.tif").read_bytes() == (tmp_path / "two.tif").read_bytes()
    with rasterio.open(tmp_path / "one.tif") as tif:
        assert ("float32", "float32") == tif.dtypes
        assert (4326, -9999.0) == (tif.crs.to_epsg(), tif.nodata)
        assert (0.5, 0.0, -120.0, 0.0, -0.5, 46.0) == tif.transform[:6]
        assert "skew" in tif.descriptions[0]
        assert "mean square error" in tif.descriptions[1]
        band = tif.read(1, masked=True)
    assert band.mask[0].all()
    np.testing.assert_allclose(sloping()[1], band[1], rtol=1e-6)


def test_a_given_map_is_read_at_places_and_is_blank_beyond_itself(tmp_path):
    write_skew_tif(tmp_path / "map.tif", GRID, sloping(), np.full((4, 6), 0.2))
    skew, mse = sample_skew_tif(
        tmp_path / "map.tif", np.array([45.25, 45.75, 10.0]), np.array([-118.2, -118.2, 0.0])
    )
    np.testing.assert_allclose([0.175, np.nan, np.nan], skew, rtol=1e-6)
    np.testing.assert_allclose([0.2, np.nan, np.nan], mse, rtol=1e-6)


def test_a_map_of_one_band_is_refused(tmp_path):
    import rasterio

    with rasterio.open(
        tmp_path / "one.tif", "w", driver="GTiff", width=2, height=2, count=1, dtype="float32", crs="EPSG:4326",
        transform=rasterio.Affine(0.5, 0, 0, 0, -0.5, 1),
    ) as tif:  # fmt: skip
        tif.write(np.zeros((2, 2), dtype="float32"), 1)
    with pytest.raises(ValueError, match="one band"):
        sample_skew_tif(tmp_path / "one.tif", np.array([0.5]), np.array([0.5]))


def test_contours_follow_equal_skew_and_a_level_map_has_none():
    lines = contour_table(GRID, sloping())
    assert {0.05, 0.1, 0.15, 0.2, 0.25} == set(np.round(lines["skew"], 6))
    for skew, text in lines.itertuples(index=False):
        x = np.asarray(shapely.from_wkt(text).coords)[:, 0]
        np.testing.assert_allclose(skew, 0.1 * (x + 120.0), atol=1e-6)
    assert contour_table(GRID, np.full((4, 6), 0.1)).empty


def test_cells_are_squares_with_both_values():
    cells = cell_table(GRID, sloping(), np.full((4, 6), 0.2))
    assert ("r002c001", 18) == (cells["cell"].iloc[0], len(cells))
    shapes = shapely.from_wkt(cells["wkt"])
    np.testing.assert_allclose(0.25, shapely.area(shapes))
    assert (-120.0, 45.0, -119.5, 45.5) == shapes[0].bounds


def square(west, south, east, north):
    return shapely.to_wkt(shapely.box(west, south, east, north))


def test_a_basin_across_a_border_is_shared_by_area():
    regions = pd.DataFrame({"region": ["a", "b"], "wkt": [square(0, 0, 1, 1), square(1, 0, 2, 1)]})
    basins = pd.DataFrame({"site_id": ["1", "2"], "wkt": [square(0.4, 0, 1.2, 1), square(0.2, 0, 0.4, 1)]})
    shares = region_shares(["1", "2", "3", "4"], ["a", "a", "b", ""], ["a", "b"], basins, regions, 1.0)
    np.testing.assert_allclose([[0.75, 0.25], [1, 0], [0, 1], [0, 0]], shares, atol=1e-12)


def test_a_region_given_by_the_study_beats_the_polygons():
    regions = pd.DataFrame({"region": ["a", "b"], "wkt": [square(0, 0, 1, 1), square(1, 0, 2, 1)]})
    basins = pd.DataFrame({"site_id": ["1"], "wkt": [square(0.4, 0, 1.2, 1)]})
    np.testing.assert_allclose([[0, 1]], region_shares(["1"], ["b"], ["a", "b"], basins, regions, 1.0))


def test_the_smallest_basin_that_covers_a_cell_gives_its_attributes():
    shapes = np.array([shapely.box(0, 0, 4, 4), shapely.box(1, 1, 2, 2)])
    found = point_membership(shapes, np.array([1.5, 3.0, 9.0]), np.array([1.5, 3.0, 9.0]))
    assert [1, 0, -1] == found.tolist()


def test_longitudes_stay_together_across_the_180th_meridian():
    np.testing.assert_allclose([179.0, 181.0], unwrap(np.array([179.0, -179.0]), 180.0))
