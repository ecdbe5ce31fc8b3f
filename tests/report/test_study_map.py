"""The map figure: true to scale, whole across the 180th meridian, the same bytes each time."""

import numpy as np
import pytest
import shapely

from wrackline.report.maps import KM_PER_DEGREE, Places, draw_study_map, group_look
from wrackline.report.style import save_figure


def places(longitude, latitude, group="A") -> Places:
    ids = tuple(f"{i:03}" for i in range(len(longitude)))
    return Places(ids, np.array(longitude, dtype=float), np.array(latitude, dtype=float), (group,) * len(ids))


@pytest.mark.parametrize("latitude", [0.0, 45.0, -65.0])
def test_a_kilometre_is_as_long_eastward_as_northward(latitude):
    gauges = places([3.0, 4.0], [latitude - 0.4, latitude + 0.4])
    figure = draw_study_map(gauges, np.array([True, True]), Places.none())
    axes = figure.axes[0]
    figure.canvas.draw()
    middle = float(np.mean(axes.get_ylim()))
    origin, east, north = axes.transData.transform([(3.0, middle), (3.1, middle), (3.0, middle + 0.1)])
    pixels_per_km_east = (east - origin)[0] / (0.1 * KM_PER_DEGREE * np.cos(np.radians(middle)))
    pixels_per_km_north = (north - origin)[1] / (0.1 * KM_PER_DEGREE)
    assert pixels_per_km_north == pytest.approx(pixels_per_km_east, rel=1e-9)


def test_region_on_both_sides_of_the_180th_meridian_stays_in_one_piece():
    gauges = places([179.0, -179.0], [-42.0, -43.0])
    regions = (shapely.box(178.5, -44, 180, -41), shapely.box(-180, -44, -178.5, -41))
    figure = draw_study_map(gauges, np.array([True, True]), places([-179.5], [-42.5]), regions=regions)
    west, east = figure.axes[0].get_xlim()
    assert 3.0 < east - west < 5.0


def test_gauges_not_used_are_hollow_and_named_in_the_legend():
    figure = draw_study_map(places([1, 2, 3], [1, 2, 3]), np.array([True, False, True]), Places.none())
    assert ["A", "gauge not used"] == [text.get_text() for text in figure.axes[0].get_legend().get_texts()]


def test_letters_that_the_font_lacks_do_not_break_the_map(tmp_path):
    figure = draw_study_map(
        places([1, 2], [1, 2], "北川"),
        np.array([True, True]),
        Places(("川$x",), np.ones(1), np.ones(1), ("",)),
    )
    save_figure(figure, tmp_path / "map.png")
    assert ["no. 1", "ungauged site"] == [text.get_text() for text in figure.axes[0].get_legend().get_texts()]


def test_sixty_four_groups_look_different():
    assert 64 == len({group_look(number) for number in range(64)})


def test_equal_places_give_equal_bytes(tmp_path):
    for name in ("a.png", "b.png"):
        save_figure(
            draw_study_map(places([1, 2], [1, 2]), np.array([True, False]), places([1.5], [1.5])),
            tmp_path / name,
        )
    assert (tmp_path / "a.png").read_bytes() == (tmp_path / "b.png").read_bytes()


def test_one_gauge_alone_can_be_mapped(tmp_path):
    save_figure(draw_study_map(places([1.0], [1.0]), np.array([True]), Places.none()), tmp_path / "one.png")
    assert (tmp_path / "one.png").stat().st_size > 0
