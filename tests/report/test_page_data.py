"""The data inside the page: safe to embed, rounded, the same bytes every time."""

import json

import numpy as np
import pandas as pd
import pytest

from wrackline.hydrology.records import PeakRecords
from wrackline.report.interactive import frame_items, library_script
from wrackline.report.map_views import map_views
from wrackline.report.page_data import build_page_data, embed_json
from wrackline.report.question import describe_question
from wrackline.report.site_details import flood_curves, peaks_of_gauges, round_values
from wrackline.study.config import StudyConfig
from wrackline.study.study_layers import study_layers
from wrackline.study.tables import Column, Table


def table(name: str, **columns) -> Table:
    frame = pd.DataFrame(columns)
    return Table(name, frame, tuple(Column(column, "", "") for column in frame))


def sites(key: str, ids: list[str], longitude: list[float]) -> pd.DataFrame:
    n = len(ids)
    return pd.DataFrame(
        {
            key: ids,
            "name": ["</script><b>"] * n,
            "latitude": 1.0 + np.arange(n),
            "longitude": longitude,
            "area_km2": 10.0,
            "region": "r",
        }
    )


def records(ids: tuple[str, ...]) -> PeakRecords:
    """Two years a gauge: an interval in a year with a threshold, then a historic peak."""
    n = len(ids)
    return PeakRecords(
        gauge_ids=ids, offsets=2 * np.arange(n + 1), water_year=np.tile([1990, 1991], n),
        flow_low=np.tile([5.0, 123.456], n), flow_high=np.tile([np.inf, 123.456], n),
        perception_low=np.tile([4.0, 0.0], n), perception_high=np.full(2 * n, np.inf),
        historic=np.tile([False, True], n), observed=np.ones(2 * n, dtype=bool), cause=np.full(2 * n, "rain"),
    )  # fmt: skip


def page_data(tmp_path, tables=None):
    tables = tables or {}
    gauges, targets = sites("gauge_id", ["01", "02"], [179.5, -179.5]), sites("target_id", ["t"], [-179.9])
    layers = study_layers(StudyConfig(), tmp_path, gauges, targets, tables)
    return build_page_data(StudyConfig(), tables, {}, gauges, targets, records(("01", "02")), layers)


def test_embedded_json_cannot_end_its_element_and_reads_back():
    content = {"name": "</script><!-- <b>&amp;\u2028", "flow": [1.5, None]}
    text = embed_json(content)
    assert not set("<>&\u2028") & set(text)
    assert content == json.loads(text)


def test_embedded_json_refuses_what_json_does_not_know():
    with pytest.raises(ValueError, match="not JSON compliant"):
        embed_json({"flow": float("nan")})


def test_numbers_of_the_page_keep_four_digits_and_blanks():
    assert [123.5, None, None, 0.0] == round_values(np.array([123.456, np.nan, np.inf, 0.0]))


def test_sites_on_both_sides_of_the_180th_meridian_stay_together(tmp_path):
    longitude = page_data(tmp_path)["sites"]["lon"]
    assert max(longitude) - min(longitude) == pytest.approx(1.0)


def test_study_with_inputs_alone_has_sites_and_peaks_and_no_calculator(tmp_path):
    data = page_data(tmp_path)
    assert ["g", "g", "t"] == data["sites"]["kind"]
    assert data["calculator"] is None
    assert data["skew"] is None
    assert {} == data["floods"]
    assert ["region"] == [view["key"] for view in data["views"]]
    assert data["sites"] == json.loads(embed_json(data))["sites"]


def test_frames_are_the_same_however_often_they_are_made(tmp_path):
    data = page_data(tmp_path)
    assert json.dumps(frame_items(data)) == json.dumps(frame_items(data))
    assert ["map-frame", "curve-frame", "years-frame"] == [item["target_id"] for item in frame_items(data)]


def test_library_asks_for_nothing_and_can_be_embedded():
    assert "</script" not in library_script().lower()
    assert len(library_script()) < 2.5e6


def test_peaks_carry_kind_open_ends_and_the_thresholds_of_their_years():
    low_floods = table("low_flood_tests", gauge_id=["01"], threshold=[0.0])
    found = peaks_of_gauges(StudyConfig(), records(("01",)), {"low_flood_tests": low_floods})["01"]
    assert [5.0, 123.5] == found["low"]
    assert [None, 123.5] == found["high"]
    assert [0, 1] == found["kind"]
    assert [[1990, 1990, 4.0, None]] == found["thresholds"]


def test_curves_are_parted_by_site_and_route_and_name_the_adopted():
    frame = table(
        "target_estimates", target_id=["a", "a", "a", "b"], aep=[0.01, 0.5, 0.5, 0.5], route=["x", "x", "y", "x"],
        flow=[9.0, 1.0, 2.0, np.nan], lower=[8.0, 0.5, 1.0, np.nan], upper=[10.0, 2.0, 3.0, np.nan],
        adopted=[True, True, False, False], warnings=["", "", "beware", ""],
    )  # fmt: skip
    found = flood_curves(frame, "target_id", "route")
    assert {"a"} == set(found)
    assert {
        "p": [0.5, 0.01],
        "flow": [1.0, 9.0],
        "lower": [0.5, 8.0],
        "upper": [2.0, 10.0],
        "adopted": True,
    } == found["a"]["x"]
    assert "beware" == found["a"]["y"]["note"]


def test_map_shows_the_change_since_the_last_edition_where_there_is_one(tmp_path):
    changes = table(
        "changes", site_id=["01", "t"], kind=["gauge", "target"], aep=[0.01, 0.01], change_percent=[-3.0, 4.0]
    )
    views = {view["key"]: view for view in page_data(tmp_path, {"changes": changes})["views"]}
    assert [-3.0, None, 4.0] == views["change"]["values"]
    assert "two_sided" == views["change"]["kind"]


def test_views_without_regions_or_numbers_still_show_all_sites(tmp_path):
    gauges = sites("gauge_id", ["01"], [0.0]).assign(region="")
    targets = sites("target_id", [], [])
    layers = study_layers(StudyConfig(), tmp_path, gauges, targets, {})
    assert ["sites"] == [view["key"] for view in map_views(StudyConfig(), {}, layers)]


def test_question_is_worded_from_the_configuration():
    config = StudyConfig.model_validate(
        {"aeps": {"gauges": [0.01], "targets": [0.01]}, "units": {"flow": "ft3/s"}}
    )
    assert (
        "The study's inputs hold 1 gauge and 2 ungauged sites.",
        "Floods are wanted for annual exceedance probabilities of 1\u202f%, in ft³/s, each with the interval that holds 90\u202f% of the probability.",
    ) == describe_question(config, 1, 2)
