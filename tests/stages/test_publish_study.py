"""The end of a study: what `publish` puts into the results folder, from contributions made by hand."""

import hashlib
import json
import re
from html.parser import HTMLParser
from itertools import pairwise
from pathlib import Path
from xml.etree import ElementTree as ET

import numpy as np
import pandas as pd
import pyogrio
import pytest

from wrackline.report.style import new_figure, save_figure
from wrackline.stages.publish import run
from wrackline.stages.running import StudyFiles
from wrackline.study.config import StudyConfig
from wrackline.study.contribution import (
    Contribution,
    Figure,
    PageTable,
    Section,
    write_contribution,
)
from wrackline.study.faults import Fault, StudyFaults
from wrackline.study.provenance import digest_geopackage
from wrackline.study.tables import Column, Table, read_table, write_table

FT3 = 0.3048**3
HOSTILE = "<script>alert(1)</script> & <b>Dam</b>"
GAUGES = ("0101", "0102", "0203", "0204", "0301")
REGIONS = ("Coast", "Coast", "Upland", "Upland", "Upland")
TARGETS = ("T-1", "T-2")
ESTIMATE_UNITS = {
    "aep": "fraction",
    "flow": "flow",
    "lower": "flow",
    "upper": "flow",
    "adopted": "true/false",
}


def make_study(folder: Path, **changes) -> StudyFiles:
    """Write a small study whose stages have run: five gauges, two targets, flows declared in ft3/s."""
    settings = {
        "study": {"title": "Floods of the Tarn basin", "agency": "Office of Rivers", "edition": "2026"},
        "units": {"flow": "ft3/s", "area": "mi2"},
        "inputs": {"targets": "targets.csv"},
        "attributes": {"rain": {"unit": "mm", "meaning": "mean annual rain"}},
        "aeps": {"targets": [0.5, 0.1, 0.01]},
    }
    config = StudyConfig.model_validate(settings | changes)
    for name in ("study.yaml", "gauges.csv", "peaks.csv", "targets.csv"):
        (folder / name).write_text(f"content of {name}\n", encoding="utf-8")
    study = StudyFiles(config, folder / "study.yaml")
    write_sites(study)
    for contribution in (intake(), screen(), pool(), estimate()):
        target = study.work(contribution.stage)
        for section in contribution.sections:
            for number, figure in enumerate(section.figures):
                drawing, axes = new_figure(4, 2)
                axes.plot([0, 1], [number, 1])
                save_figure(drawing, target / "figures" / figure.file)
        write_contribution(target, contribution)
    return study


def write_sites(study: StudyFiles) -> None:
    write_table(
        study.work("intake") / "gauges.csv",
        pd.DataFrame(
            {
                "gauge_id": GAUGES,
                "name": [HOSTILE, "=2+3", "Río Niebla", "北川", "Low Bridge"],
                "latitude": [44.1, 44.3, 44.6, 44.8, 45.0],
                "longitude": [3.1, 3.4, 3.2, 3.8, 3.6],
                "area_km2": [1.609344**2, 52.0, 260.0, 75.0, 33.0],
                "region": REGIONS,
                "rain": [900.0, 950.0, 1200.0, 1100.0, np.nan],
            }
        ),
    )
    write_table(
        study.work("intake") / "targets.csv",
        pd.DataFrame(
            {
                "target_id": TARGETS,
                "name": ["Mill", "Weir"],
                "latitude": [44.2, 44.7],
                "longitude": [3.3, 3.5],
                "area_km2": [40.0, 90.0],
                "region": ["Coast", "Upland"],
                "rain": [920.0, 1150.0],
            }
        ),
    )
    box = "POLYGON ((3 44, 3.2 44, 3.2 44.2, 3 44.2, 3 44))"
    write_table(study.work("intake") / "basins.csv", pd.DataFrame({"site_id": ["0101"], "wkt": [box]}))
    years = [1936, 1990, 1991, 1992]
    rows = [(gauge, year, number) for number, gauge in enumerate(GAUGES[:4]) for year in years]
    flow = np.array([100.0 + 10 * number + year % 7 for _, year, number in rows]) * FT3
    write_table(
        study.work("screen") / "records.csv",
        pd.DataFrame(
            {
                "gauge_id": [row[0] for row in rows],
                "water_year": [row[1] for row in rows],
                "flow_low": np.where([row[1] == 1992 for row in rows], 0.0, flow),
                "flow_high": flow,
                "perception_low": 0.0,
                "perception_high": np.inf,
                "historic": [row[1] == 1936 for row in rows],
                "observed": [row[1] != 1991 for row in rows],
                "cause": "rain",
            }
        ),
    )


def intake() -> Contribution:
    ledger = pd.DataFrame(
        {"date": ["2026-01-05"], "by": ["A. Analyst"], "why": [HOSTILE], "effect": ["1 peak left out"]}
    )
    return Contribution(
        "intake",
        tables=(Table("ledger", ledger, tuple(Column(name, "text", "ledger") for name in ledger.columns)),),
        sections=(
            Section(
                "data",
                "Data",
                ("Five gauges were read.", HOSTILE),
                (Figure("years.png", HOSTILE, '" onerror="alert(1)'),),
                method=("Ledger first.",),
            ),
        ),
        warnings=(
            Fault("odd_name", "warning", "gauges.csv", "the name is odd.", "Look at it.", 2, "name", HOSTILE),
        ),
    )


def screen() -> Contribution:
    screening = pd.DataFrame(
        {
            "gauge_id": GAUGES,
            "n_peaks": [4, 4, 4, 4, 0],
            "used": [True] * 4 + [False],
            "reasons": [""] * 4 + ["short_record"],
        }
    )
    accounting = pd.DataFrame({"gauge_id": ["0101"] * 3, "fate": ["used", "interval", "excluded"]})
    return Contribution(
        "screen",
        tables=(
            Table(
                "gauge_screening",
                screening,
                (
                    Column("gauge_id", "text", "gauge"),
                    Column("n_peaks", "count", "peaks"),
                    Column("used", "true/false", "in use"),
                    Column("reasons", "text", "why not"),
                ),
            ),
            Table(
                "record_accounting",
                accounting,
                (Column("gauge_id", "text", "gauge"), Column("fate", "text", "fate")),
            ),
        ),
        sections=(Section("screening", "Screening", ("Four of five gauges are used.",)),),
    )


def pool() -> Contribution:
    members = pd.DataFrame({"pool": REGIONS[:4], "gauge_id": GAUGES[:4]})
    tests = pd.DataFrame(
        {
            "pool": ["Coast", "Upland"],
            "n_gauges": [2, 2],
            "station_years": [6, 6],
            "h1": [-0.5, 1.25],
            "verdict": ["homogeneous", "possibly_heterogeneous"],
        }
    )
    moments = pd.DataFrame(
        {
            "gauge_id": GAUGES[:4],
            "n": 3,
            "mean": [101.0, 111.0, 121.0, 131.0],
            "lcv": 0.2,
            "lskew": 0.1,
            "lkurtosis": 0.15,
        }
    )
    return Contribution(
        "pool",
        tables=(
            Table("pools", members, (Column("pool", "text", "pool"), Column("gauge_id", "text", "gauge"))),
            Table("pool_tests", tests, tuple(Column(name, "", "of the pool") for name in tests.columns)),
            Table(
                "gauge_lmoments",
                moments,
                (
                    Column("gauge_id", "text", "gauge"),
                    Column("n", "count", "peaks"),
                    Column("mean", "flow", "mean"),
                    *(Column(name, "", name) for name in ("lcv", "lskew", "lkurtosis")),
                ),
            ),
        ),
        sections=(
            Section(
                "growth",
                "Growth curves",
                ("Two curves.",),
                tables=(
                    PageTable("Curves", ("AEP", "Factor"), (("1 %", "2.10"),), "tables/growth_curves.csv"),
                ),
            ),
            Section("homogeneity", "Homogeneity", ("Two pools.",)),
        ),
    )


def estimate() -> Contribution:
    rows = [(site, aep) for site in TARGETS for aep in (0.5, 0.1, 0.01)]
    flow = np.array([100.0, 200.0, 412.345, 210.0, 420.0, 12345.6])
    frame = pd.DataFrame(
        {
            "target_id": [row[0] for row in rows],
            "aep": [row[1] for row in rows],
            "route": "growth_curve",
            "flow": flow,
            "lower": flow * 0.7,
            "upper": flow * 1.5,
            "adopted": True,
            "warnings": ["rain is above the gauges' range"] * 3 + [""] * 3,
        }
    )
    return Contribution(
        "estimate",
        tables=(
            Table(
                "target_estimates",
                frame,
                tuple(Column(name, ESTIMATE_UNITS.get(name, "text"), name) for name in frame.columns),
            ),
        ),
        sections=(Section("estimates", "Estimates", ("Floods at two sites.",)),),
        models={"equations": {"index_flood": {"coefficients": [1.0, 0.7]}}},
    )


@pytest.fixture(scope="module")
def published(tmp_path_factory):
    study = make_study(tmp_path_factory.mktemp("étude 1"))
    run(study)
    return study


def test_results_hold_every_table_model_figure_map_page_and_manifest(published):
    found = {
        path.relative_to(published.results).as_posix()
        for path in published.results.rglob("*")
        if path.is_file()
    }
    tables = "columns gauge_lmoments gauge_screening ledger peaks_used pool_tests pools record_accounting target_estimates warnings"
    expected = {f"tables/{name}.csv" for name in tables.split()} | {
        "tables/equations.json",
        "report.html",
        "manifest.json",
    }
    expected |= {"figures/intake_years.png", "figures/publish_map.png", "maps/study.gpkg"}
    expected |= {f"maps/{name}.sld" for name in ("gauges", "targets", "basins", "regions")}
    assert expected == found


def test_tables_are_copied_byte_for_byte(published):
    for stage, name in (("screen", "gauge_screening.csv"), ("estimate", "equations.json")):
        written = (published.work(stage) / "tables" / name).read_bytes()
        assert written == (published.results / "tables" / name).read_bytes()


def test_dictionary_lists_every_column_of_every_table_in_declared_units(published):
    listed = read_table(published.results / "tables" / "columns.csv", text=("unit", "meaning"))
    expected = [
        (path.stem, name)
        for path in sorted((published.results / "tables").glob("*.csv"))
        for name in pd.read_csv(path, nrows=0).columns
    ]
    assert sorted(expected) == list(zip(listed["table"], listed["column"], strict=True))
    units = {(row.table, row.column): row.unit for row in listed.itertuples()}
    assert units["target_estimates", "flow"] == "ft3/s"
    assert units["peaks_used", "low"] == "ft3/s"
    assert not {"flow", "area"} & set(units.values())


def test_warnings_keep_their_place_and_cannot_become_formulas(published):
    row = read_table(
        published.results / "tables" / "warnings.csv", text=("file", "column", "value", "problem", "mend")
    ).iloc[0]
    assert (row["file"], row["row"], row["column"], row["value"], row["mend"]) == (
        "gauges.csv",
        2,
        "name",
        HOSTILE,
        "Look at it.",
    )


def test_peaks_used_are_in_the_declared_unit_and_leave_out_years_without_a_peak(published):
    peaks = read_table(published.results / "tables" / "peaks_used.csv").query("gauge_id == '0102'")
    assert peaks["water_year"].tolist() == [1936, 1990, 1992]
    # the sheet holds 110 + year mod 7 ft3/s; conversion to m3/s and back costs at most a few units in the last place
    np.testing.assert_allclose([114.0, 112.0, 114.0], peaks["high"], rtol=1e-14)
    assert pytest.approx(peaks["low"].tolist(), rel=1e-14) == [114.0, 112.0, 0.0]


def test_layers_hold_what_the_tables_say_in_declared_units(published):
    path = published.results / "maps" / "study.gpkg"
    assert sorted(pyogrio.list_layers(path)[:, 0]) == ["basins", "columns", "gauges", "regions", "targets"]
    gauges = pyogrio.read_dataframe(path, layer="gauges").set_index("gauge_id")
    assert gauges.crs.to_string() == "EPSG:4326"
    assert list(GAUGES) == gauges.index.tolist()
    assert pytest.approx(gauges.loc["0101", "area"], rel=1e-12) == 1.0
    assert gauges["standing"].tolist() == ["used"] * 4 + ["not used"]
    assert gauges.loc["0203", "mean"] == 121.0
    assert gauges.loc["0204", "pool"] == "Upland"
    assert gauges.loc["0204", "name"] == "北川"
    assert (gauges.geometry["0204"].x, gauges.geometry["0204"].y) == (3.8, 44.8)
    targets = pyogrio.read_dataframe(path, layer="targets").set_index("target_id")
    assert targets.loc["T-2", "aep_0_01"] == 12345.6
    assert targets.loc["T-2", "aep_0_01_lower"] == 12345.6 * 0.7
    units = pyogrio.read_dataframe(path, layer="columns").set_index(["layer", "column"])["unit"]
    assert units["targets", "aep_0_01"] == "ft3/s"
    assert units["gauges", "area"] == "mi2"


def test_styles_ask_only_for_fields_and_values_that_the_layers_have(published):
    path = published.results / "maps" / "study.gpkg"
    for name in ("gauges", "targets", "basins", "regions"):
        root = ET.parse(path.with_name(f"{name}.sld")).getroot()
        assert name == root.findtext(".//{*}NamedLayer/{*}Name")
        layer = pyogrio.read_dataframe(path, layer=name)
        for test in root.iter("{http://www.opengis.net/ogc}PropertyIsEqualTo"):
            field, value = test.findtext("{*}PropertyName"), test.findtext("{*}Literal")
            assert value in set(layer[field])


def test_manifest_digests_every_input_and_output(published):
    manifest = json.loads((published.results / "manifest.json").read_text(encoding="utf-8"))
    assert {"study.yaml", "gauges.csv", "peaks.csv", "targets.csv"} == set(manifest["inputs"])
    assert hashlib.sha256(b"content of peaks.csv\n").hexdigest() == manifest["inputs"]["peaks.csv"]["sha256"]
    files = {p.relative_to(published.results).as_posix() for p in published.results.rglob("*") if p.is_file()}
    assert files - {"manifest.json"} == set(manifest["outputs"])
    for name, digest in manifest["outputs"].items():
        path = published.results / name
        expected = (
            {"content_sha256": digest_geopackage(path)}
            if name.endswith(".gpkg")
            else {"sha256": hashlib.sha256(path.read_bytes()).hexdigest()}
        )
        assert expected == digest
    assert (manifest["edition"], manifest["seed"]) == ("2026", 20261001)
    assert manifest["configuration"]["units"]["flow"] == "ft3/s"
    assert manifest["configuration"]["screening"]["significance"] == 0.05
    assert {"wrackline", "python", "numpy", "scipy", "pandas", "geopandas"} <= set(manifest["software"])


def test_page_prints_the_run_digest_and_the_adopted_floods(published):
    page = (published.results / "report.html").read_text(encoding="utf-8")
    manifest = json.loads((published.results / "manifest.json").read_text(encoding="utf-8"))
    assert manifest["run_digest"] in page
    assert '<td class="n">12\u202f300</td>' in page
    assert "412" in page
    assert "412.3" not in without_scripts(page)


def without_scripts(page: str) -> str:
    """The page less its own scripts, their data and the library; what is left must hold no script."""
    return re.sub(r"<script[^>]*>.*?</script>", "", page, flags=re.DOTALL)


def attributes_of(page: str) -> list[tuple[str, str | None]]:
    """Every attribute of every element, as an HTML parser sees it."""
    found = []

    class Reader(HTMLParser):
        def handle_starttag(self, tag, attributes):
            found.extend(attributes)

    Reader().feed(page)
    return found


def test_names_from_users_stay_inert_everywhere_on_the_page(published):
    page = (published.results / "report.html").read_text(encoding="utf-8")
    data = re.search(r'<script type="application/json" id="study-data">(.*?)</script>', page, flags=re.DOTALL)
    assert data is not None
    assert "alert(1)" in data[1]
    assert not set("<>&") & set(data[1])
    assert "<b>Dam</b>" not in page
    page = without_scripts(page)
    assert "<script" not in page
    assert not {name for name, _ in attributes_of(page) if name.startswith("on")}
    assert (
        page.count("&lt;script&gt;alert(1)&lt;/script&gt;") >= 4
    )  # paragraph, caption, warning, ledger, list of peaks


def test_page_needs_nothing_from_elsewhere(published):
    page = (published.results / "report.html").read_text(encoding="utf-8")
    addresses = [value for name, value in attributes_of(page) if name in ("src", "href")]
    assert addresses
    assert all(address.startswith(("#", "data:image/png;base64,")) for address in addresses)
    assert not re.search(r"https?://|url\(|@import", without_scripts(page))


def test_sections_stand_in_reading_order_with_anchors_for_each(published):
    page = (published.results / "report.html").read_text(encoding="utf-8")
    expected = [
        "asked",
        "glance",
        "map-section",
        "section-data",
        "section-screening",
        "section-homogeneity",
        "section-growth",
    ]
    expected += ["section-estimates", "warnings", "cautions", "methods", "provenance", "peaks", "ledger"]
    assert expected == re.findall(r'<section id="([^"]+)"', page)
    assert expected == re.findall(r'<li><a href="#([^"]+)"', page)


def test_headings_never_skip_a_level_and_figures_say_what_they_show(published):
    page = (published.results / "report.html").read_text(encoding="utf-8")
    levels = [int(level) for level in re.findall(r"<h([1-6])", page)]
    assert levels.count(1) == 1
    assert all(after - before <= 1 for before, after in pairwise(levels))
    assert all(re.search(r'alt="[^"]+"', image) for image in re.findall(r"<img[^>]*>", page))
    identifiers = re.findall(r'\sid="([^"]+)"', page)
    assert len(identifiers) == len(set(identifiers))


def test_two_runs_give_equal_bytes(tmp_path):
    for name in ("one", "two"):
        (tmp_path / name).mkdir()
        run(make_study(tmp_path / name))
    first, second = tmp_path / "one" / "results", tmp_path / "two" / "results"
    for path in sorted(p for p in first.rglob("*") if p.is_file() and p.suffix != ".gpkg"):
        assert path.read_bytes() == (second / path.relative_to(first)).read_bytes(), path.name


def test_rerun_removes_only_files_that_an_earlier_run_wrote(tmp_path):
    study = make_study(tmp_path)
    run(study)
    (study.results / "notes.txt").write_text("mine", encoding="utf-8")
    (study.results / "tables" / "mine.csv").write_text("a\n", encoding="utf-8")
    outside = tmp_path / "precious.csv"
    outside.write_text("a\n", encoding="utf-8")
    manifest = json.loads((study.results / "manifest.json").read_text(encoding="utf-8"))
    manifest["outputs"]["../precious.csv"] = {"sha256": "0"}
    (study.results / "manifest.json").write_text(json.dumps(manifest), encoding="utf-8")
    (study.work("pool") / "contribution.json").unlink()
    run(study)
    assert not (study.results / "tables" / "pools.csv").exists()
    assert (study.results / "notes.txt").exists()
    assert (study.results / "tables" / "mine.csv").exists()
    assert outside.exists()


def test_failed_run_leaves_the_former_results_as_they_were(tmp_path):
    study = make_study(tmp_path)
    run(study)
    before = {p: p.read_bytes() for p in study.results.rglob("*") if p.is_file()}
    (tmp_path / "peaks.csv").unlink()
    with pytest.raises(StudyFaults) as told:
        run(study)
    assert [fault.code for fault in told.value.problems] == ["missing_input"]
    assert before == {p: p.read_bytes() for p in study.results.rglob("*") if p.is_file()}


def test_study_without_any_stage_is_told_so(tmp_path):
    study = StudyFiles(StudyConfig(), tmp_path / "study.yaml")
    with pytest.raises(StudyFaults) as told:
        run(study)
    assert [fault.code for fault in told.value.problems] == ["nothing_to_publish"]


def test_run_digest_changes_with_an_input_and_not_with_the_place(tmp_path):
    digests = []
    for name, peaks in (("a", "1"), ("b", "1"), ("c", "2")):
        (tmp_path / name).mkdir()
        study = make_study(tmp_path / name)
        (study.folder / "peaks.csv").write_text(peaks, encoding="utf-8")
        run(study)
        digests.append(
            json.loads((study.results / "manifest.json").read_text(encoding="utf-8"))["run_digest"]
        )
    assert digests[0] == digests[1]
    assert digests[0] != digests[2]
