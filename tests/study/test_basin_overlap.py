import numpy as np
import pandas as pd
import shapely

from wrackline.study.basin_overlap import overlap_shares


def square(west, south, size):
    east, north = west + size, south + size
    return f"POLYGON (({west} {south}, {east} {south}, {east} {north}, {west} {north}, {west} {south}))"


BASINS = pd.DataFrame(
    {
        "site_id": ["whole", "half", "inside", "apart", "bowtie"],
        "wkt": [
            square(8.0, 46.0, 0.2),
            square(8.1, 46.0, 0.2),
            square(8.05, 46.05, 0.05),
            square(9.0, 46.0, 0.2),
            "POLYGON ((8 46, 8.2 46.2, 8.2 46, 8 46.2, 8 46))",
        ],
    }
)


def test_shares_are_of_the_smaller_basin():
    got = overlap_shares(BASINS, ["whole", "whole", "inside", "whole"], ["half", "inside", "whole", "apart"])
    # Half of a square of degrees is half of its ground: the strips differ in width by nothing.
    np.testing.assert_allclose([0.5, 1.0, 1.0, 0.0], got, atol=1e-4)


def test_a_site_without_polygon_has_no_share():
    got = overlap_shares(BASINS, ["whole", "whole"], ["unknown", "inside"])
    np.testing.assert_array_equal([True, False], np.isnan(got))


def test_no_polygons_at_all_give_no_shares():
    got = overlap_shares(pd.DataFrame({"site_id": [], "wkt": []}), ["a"], ["b"])
    assert np.isnan(got).tolist() == [True]


def test_a_polygon_that_crosses_itself_is_mended():
    # The bow tie covers half of the square.
    np.testing.assert_allclose([1.0], overlap_shares(BASINS, ["bowtie"], ["whole"]), atol=1e-6)


def test_shares_are_of_ground_not_of_degrees():
    south, north = (shapely.segmentize(shapely.box(0, a, 1, b), 0.5).wkt for a, b in ((0, 45), (30, 60)))
    basins = pd.DataFrame({"site_id": ["south", "north"], "wkt": [south, north]})
    expected = (np.sin(np.pi / 4) - 0.5) / (np.sin(np.pi / 3) - 0.5)
    # On a sphere; the ellipsoid changes the share of a strip this long by less than 0.002.
    np.testing.assert_allclose([expected], overlap_shares(basins, ["south"], ["north"]), atol=2e-3)
