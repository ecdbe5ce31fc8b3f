import numpy as np

from wrackline.hydrology.distances import EARTH_RADIUS_KM, great_circle_km


def test_one_degree_along_a_meridian_is_that_arc():
    np.testing.assert_allclose(EARTH_RADIUS_KM * np.pi / 180, great_circle_km(10, 5, 11, 5), rtol=1e-12)


def test_equal_places_are_exactly_zero_apart():
    assert great_circle_km(47.1, 8.2, 47.1, 8.2) == 0.0


def test_antipodes_are_half_the_circumference_apart():
    np.testing.assert_allclose(EARTH_RADIUS_KM * np.pi, great_circle_km(30, 40, -30, -140), rtol=1e-7)


def test_the_date_line_is_no_gap():
    np.testing.assert_allclose(great_circle_km(0, 0, 0, 2), great_circle_km(0, 179, 0, -179), rtol=1e-9)


def test_agrees_with_the_dot_product_of_unit_vectors():
    rng = np.random.default_rng(4)
    lat, lon = rng.uniform(-80, 80, 40), rng.uniform(-180, 180, 40)
    phi, lam = np.radians(lat), np.radians(lon)
    unit = np.column_stack([np.cos(phi) * np.cos(lam), np.cos(phi) * np.sin(lam), np.sin(phi)])
    expected = EARTH_RADIUS_KM * np.arccos(np.clip(unit @ unit.T, -1, 1))
    off = ~np.eye(40, dtype=bool)
    got = great_circle_km(lat[:, None], lon[:, None], lat, lon)
    np.testing.assert_allclose(expected[off], got[off], rtol=1e-9)


def test_a_missing_coordinate_gives_a_missing_distance():
    assert np.isnan(great_circle_km(np.nan, 0, 1, 1))
