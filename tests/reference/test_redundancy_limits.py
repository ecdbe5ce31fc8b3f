"""Standardized distance and area ratio of three pairs; computed by hand from the definitions, not published.

The criterion, from memory: candidates have a standardized distance of at most 0.5 and an area ratio of at most 5
(Veilleux, 2009; after Gruber and Stedinger, 2008).
"""

import numpy as np
import pytest

from wrackline.hydrology.distances import EARTH_RADIUS_KM
from wrackline.hydrology.redundancy import find_nested_pairs, standardized_distance

# area 1 (km2), area 2 (km2), distance (km), standardized distance, area ratio, candidate
PAIRS = [
    (100, 150, 4, 0.357770876400, 1.5, True),
    (100, 600, 4, 0.2138, 6.0, False),
    (10, 12, 3, 0.9045, 1.2, False),
]


@pytest.mark.parametrize(("area_1", "area_2", "distance", "expected", "ratio", "candidate"), PAIRS)
def test_pairs_on_both_sides_of_the_limits(area_1, area_2, distance, expected, ratio, candidate):
    # Half of the last printed digit of the coarser figures.
    np.testing.assert_allclose(expected, standardized_distance(distance, area_1, area_2), atol=5e-5)
    north = np.degrees(distance / EARTH_RADIUS_KM)
    found = find_nested_pairs([45.0, 45.0 + north], [8.0, 8.0], [area_1, area_2])
    assert len(found) == (1 if candidate else 0)
    everything = find_nested_pairs([45.0, 45.0 + north], [8.0, 8.0], [area_1, area_2], 10.0, 100.0)
    np.testing.assert_allclose(expected, everything.standardized_distance, atol=5e-5)
    np.testing.assert_allclose([ratio], everything.area_ratio, rtol=1e-12)


def test_the_first_pair_to_all_its_digits():
    np.testing.assert_allclose(0.357770876400, standardized_distance(4, 100, 150), atol=5e-13)
