"""A column of logarithms says of which unit they are."""

import pytest

from wrackline.study.config import StudyConfig
from wrackline.study.published import declared_unit


@pytest.mark.parametrize(
    ("expected", "unit"),
    [
        ("ft3/s", "flow"),
        ("mi2", "area"),
        ("log10 of ft3/s", "log10 of flow"),
        ("log10 of mi2", "log10 of area"),
        ("log10 cycles", "log10 cycles"),
    ],
)
def test_flows_areas_and_their_logarithms_are_of_the_declared_unit(expected: str, unit: str) -> None:
    config = StudyConfig.model_validate({"units": {"flow": "ft3/s", "area": "mi2"}})
    assert expected == declared_unit(unit, config)
