"""Map layers written and read back."""

import numpy as np
import pandas as pd
import pyogrio
import pytest

from wrackline.study.gis import point_layer, polygon_layer, read_polygons, write_geopackage
from wrackline.study.provenance import digest_geopackage
from wrackline.study.tables import Column


def gauges(flow: float = 1.5) -> pd.DataFrame:
    return pd.DataFrame(
        {
            "gauge_id": ["007", "8"],
            "longitude": [3.0, 4.0],
            "latitude": [44.0, 45.0],
            "used": [True, False],
            "checked": [True, None],
            "flow": [flow, np.nan],
            "reasons": ["", None],
        }
    )


def columns(frame: pd.DataFrame) -> tuple[Column, ...]:
    return tuple(Column(name, "m3/s" if name == "flow" else "text", f"the {name}") for name in frame.columns)


def layers(frame: pd.DataFrame) -> dict:
    square = pd.DataFrame({"site_id": ["007"], "wkt": ["POLYGON ((0 0, 1 0, 1 1, 0 0))"]})
    return {
        "gauges": point_layer(frame, columns(frame)),
        "basins": polygon_layer(square, (Column("site_id", "text", "site"),)),
    }


def test_identifiers_truth_values_and_gaps_survive(tmp_path):
    path = tmp_path / "study.gpkg"
    write_geopackage(path, layers(gauges()))
    read = pyogrio.read_dataframe(path, layer="gauges")
    assert ["007", "8"] == read["gauge_id"].tolist()
    assert [True, False] == read["used"].tolist()
    assert 1.5 == read["flow"][0]
    assert np.isnan(read["flow"][1])
    info = pyogrio.read_info(path, layer="gauges")
    kinds = dict(zip(info["fields"], info["dtypes"], strict=True))
    assert ("bool", "bool", "float64") == (kinds["used"], kinds["checked"], kinds["flow"])
    assert "MultiPolygon" == pyogrio.read_info(path, layer="basins")["geometry_type"]


def test_file_tells_the_units_of_its_layers(tmp_path):
    write_geopackage(tmp_path / "study.gpkg", layers(gauges()))
    units = pyogrio.read_dataframe(tmp_path / "study.gpkg", layer="columns").set_index(["layer", "column"])
    assert "m3/s" == units.loc[("gauges", "flow"), "unit"]
    assert "the site_id" != units.loc[("basins", "site_id"), "meaning"] == "site"


def test_study_without_polygons_still_has_the_layer(tmp_path):
    empty = polygon_layer(
        read_polygons(tmp_path / "none.csv", "region"), (Column("region", "text", "region"),)
    )
    write_geopackage(tmp_path / "study.gpkg", {"regions": empty})
    assert 0 == pyogrio.read_info(tmp_path / "study.gpkg", layer="regions")["features"]


def test_layer_refuses_columns_whose_meaning_is_not_stated():
    with pytest.raises(ValueError, match="not those stated"):
        point_layer(gauges(), columns(gauges())[:-1])


def test_content_digest_is_that_of_the_layers_and_not_of_the_bytes(tmp_path):
    shuffled = gauges().iloc[::-1].reset_index(drop=True)
    for name, frame in (("a", gauges()), ("b", gauges()), ("c", gauges(1.5000000001)), ("d", shuffled)):
        write_geopackage(tmp_path / f"{name}.gpkg", layers(frame))
    digest = {name: digest_geopackage(tmp_path / f"{name}.gpkg") for name in "abcd"}
    assert digest["a"] == digest["b"]
    assert digest["a"] == digest["d"]
    assert digest["a"] != digest["c"]


def test_failed_write_leaves_the_former_file_and_nothing_beside_it(tmp_path):
    path = tmp_path / "study.gpkg"
    write_geopackage(path, layers(gauges()))
    before = path.read_bytes()
    broken = layers(gauges())
    broken["gauges"].frame["flow"] = [1j, 2j]
    with pytest.raises(Exception, match=r".+"):
        write_geopackage(path, broken)
    assert before == path.read_bytes()
    assert ["study.gpkg"] == [p.name for p in tmp_path.iterdir()]
