"""The study page as a reader meets it: headless Chromium, no network."""

from __future__ import annotations

import base64
import csv
import io
import json
import re
import time
from pathlib import Path

import numpy as np
import pytest
from selenium.webdriver import ActionChains, Keys

import wrackline

pytestmark = pytest.mark.browser

GAUGE, GAUGE_NAME = "0410025", "Merolt"
HOSTILE_GAUGE = "0410050"
SECTIONS = "return [...document.querySelectorAll('main > section')].map((one) => one.id)"


def site_number(page, site):
    return page.run("return study.sites.id.indexOf(arguments[0])", site)


def point_of(page, site):
    """Where a site's symbol is drawn, relative to the middle of the map's element, in pixels."""
    return page.run(
        """
        const i = study.sites.id.indexOf(arguments[0]), frame = frames.map.view.frame;
        const box = document.getElementById("map-frame").getBoundingClientRect();
        const outer = frames.map.view.el.getBoundingClientRect();
        const x = frame.x_scale.compute(study.sites.lon[i]) + outer.x - box.x;
        const y = frame.y_scale.compute(study.sites.lat[i]) + outer.y - box.y;
        return [x - box.width / 2, y - box.height / 2];
        """,
        site,
    )


def curve_lines(page):
    return page.run("return part('curve', 'lines').data_source.data.ys.length")


def test_page_opens_from_disk_without_a_request_or_a_complaint(example_page):
    requests = [
        json.loads(entry["message"])["message"] for entry in example_page.driver.get_log("performance")
    ]
    asked = [m["params"]["request"]["url"] for m in requests if m["method"] == "Network.requestWillBeSent"]
    elsewhere = [url for url in asked if not url.startswith(("file:", "data:", "blob:", "about:"))]
    assert [] == elsewhere
    assert 1 == sum(url.startswith("file:") for url in asked)
    assert [] == example_page.complaints()


def test_picking_a_gauge_on_the_map_shows_its_curve_peaks_and_floods(example_page):
    assert 0 == curve_lines(example_page)
    frame = example_page.find("#map-frame")
    example_page.run("arguments[0].scrollIntoView({block: 'center'})", frame)
    x, y = point_of(example_page, GAUGE)
    ActionChains(example_page.driver).move_to_element_with_offset(frame, int(x), int(y)).click().perform()
    example_page.wait("return document.getElementById('site-title').innerText.includes('" + GAUGE_NAME + "')")
    assert 4 == curve_lines(example_page)
    assert 101 == example_page.run("return part('curve', 'peaks').data_source.data.z.length")
    assert "record and regression, adopted" in example_page.text("#site-details thead")
    assert "station skew" in example_page.text("#site-details dl")
    assert example_page.run("return location.hash") == f"#site={GAUGE}"
    drawn = example_page.run(
        "const c = frames.curve.view.el.shadowRoot.querySelector('canvas') ?? document.querySelector('#curve-frame canvas');"
        "return c ? c.width * c.height : frames.curve.view.canvas_view.primary.canvas.width"
    )
    assert drawn > 0
    assert [] == example_page.complaints()


def test_thresholds_and_historic_floods_of_a_gauge_are_shown(example_page):
    site = example_page.run(
        "return Object.entries(study.peaks).find(([id, one]) => one.thresholds.length && one.kind.includes(1))[0]"
    )
    example_page.run("sitePanel.show(study.sites.id.indexOf(arguments[0]))", site)
    assert "historic peak" in example_page.text("#curve-legend")
    assert "would have left no record" in example_page.text("#years-caption")
    assert example_page.run("return part('years', 'unseen').data_source.data.left.length") > 0


@pytest.mark.parametrize(("typed", "title"), [("merolt upper", GAUGE), ("T03", "T03"), ("0410025", GAUGE)])
def test_search_by_name_or_number_and_keyboard_alone(example_page, typed, title):
    field = example_page.find("#site-search")
    field.send_keys(typed)
    assert "true" == field.get_attribute("aria-expanded")
    field.send_keys(Keys.ARROW_DOWN)
    assert "site-option-0" == field.get_attribute("aria-activedescendant")
    field.send_keys(Keys.ENTER)
    assert title in example_page.text("#site-title")
    assert "false" == field.get_attribute("aria-expanded")


def test_search_without_a_hit_says_so(example_page):
    example_page.find("#site-search").send_keys("no such river")
    assert "No site has this name or number." == example_page.text("#search-count")


def test_link_to_one_site_opens_it(chromium, example_results):
    chromium.open(example_results / "report.html", "#site=T03")
    assert "T03" in chromium.text("#site-title")
    assert curve_lines(chromium) > 0


def test_link_to_an_unknown_site_is_explained(chromium, example_results):
    chromium.open(example_results / "report.html", "#site=Z%2099")
    assert "does not have: Z 99" in chromium.text("#search-count")


def test_map_moves_and_zooms_by_keys_and_buttons(example_page):
    span = "const r = frames.map.figure.x_range; return [(r.start + r.end) / 2, r.end - r.start]"
    middle, width = example_page.run(span)
    frame = example_page.find("#map-frame")
    frame.send_keys(Keys.ARROW_RIGHT)
    moved, same = example_page.run(span)
    assert moved > middle
    assert same == pytest.approx(width)
    frame.send_keys("+")
    assert example_page.run(span)[1] == pytest.approx(0.7 * width)
    example_page.find("#map-whole").click()
    assert example_page.run(span) == pytest.approx([middle, width])


def test_every_view_of_the_map_has_a_legend_and_says_what_to_see(example_page):
    labels = example_page.run("return study.views.map((view) => view.label)")
    assert {"Region", "Station skew", "Generalized skew"} <= set(labels)
    for number, label in enumerate(labels):
        example_page.run(
            "const s = document.getElementById('map-view'); s.value = arguments[0]; s.dispatchEvent(new Event('change'))",
            number,
        )
        assert example_page.run("return document.querySelectorAll('#map-legend li').length") >= 2, label
        assert example_page.text("#map-note"), label
    assert [] == example_page.complaints()


def test_skew_surface_and_its_error_can_be_laid_on_the_map(example_page):
    for label in ("generalized skew", "error of the skew"):
        box = next(
            x
            for x in example_page.driver.find_elements("css selector", "#map-layers label")
            if label == x.text.strip()
        )
        box.click()
    legend = example_page.text("#map-legend")
    assert "generalized skew" in legend
    assert "mean square error of the skew" in legend


def random_targets(results: Path, n: int = 50) -> str:
    """Invented sites within and beyond the gauges' range, in all regions, some on gauged streams."""
    rng = np.random.default_rng(8)
    models = json.loads((results / "tables" / "saved_models.json").read_text(encoding="utf-8"))
    gauges, regions = sorted(models["gauges"]), sorted(models["growth"])
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(
        [
            "target_id",
            "name",
            "latitude",
            "longitude",
            "area",
            "precipitation",
            "forest",
            "region",
            "upstream_gauge",
            "downstream_gauge",
        ]
    )
    for i in range(n):
        gauge = gauges[int(rng.integers(len(gauges)))]
        near = models["gauges"][gauge]["area_km2"] * rng.uniform(0.55, 1.45)
        neighbour = min(
            gauges,
            key=lambda name: abs(models["gauges"][name]["area_km2"] - near) if name != gauge else np.inf,
        )
        streams = [("", ""), (gauge, ""), ("", gauge), (gauge, neighbour)][i % 4]
        area = near if any(streams) else 10 ** rng.uniform(0.5, 4.2)
        writer.writerow(
            [f"N{i:02d}", f"New, site {i}", 40.0, -147.0, repr(float(area)), round(rng.uniform(300, 2500), 1),
             round(rng.uniform(0, 100), 1), regions[i % len(regions)], *streams]
        )  # fmt: skip
    return out.getvalue()


def test_calculator_equals_the_command_on_fifty_sites(example_page, example_results, tmp_path):
    text = random_targets(example_results)
    path = tmp_path / "targets.csv"
    path.write_text(text, encoding="utf-8")
    expected = wrackline.estimate(example_results, path).table
    example_page.run("calculator.readMany(arguments[0])", text)
    assert "" == example_page.text("#calc-problems")
    found = list(csv.DictReader(io.StringIO(example_page.run("return calculator.csv()"))))
    key = lambda row: (row["target_id"], float(row["aep"]), row["route"])  # noqa: E731
    by_key = {key(row): row for row in found}
    assert 50 == len({row["target_id"] for row in found})
    assert len(expected) == len(by_key) == len(found)
    assert {"growth_curve", "quantile_regression", "routes_combined", "stream_transfer"} == set(
        expected["route"]
    )
    for row in expected.to_dict("records"):
        other = by_key[key(row)]
        for name in ("flow", "lower", "upper", "se_log10"):
            assert float(other[name]) == pytest.approx(row[name], rel=1e-6)
        assert str(row["adopted"]).lower() == other["adopted"]
        assert row["warnings"] == other["warnings"]
    assert any("range" in row["warnings"] for row in found)


def fill_form(page, **values):
    for name, value in values.items():
        page.run(
            "document.getElementById('calc-form').elements[arguments[0]].value = arguments[1]", name, value
        )
    page.run("document.getElementById('calc-form').requestSubmit()")


def test_one_site_from_the_form_gets_every_probability_route_and_the_skew(example_page):
    fill_form(example_page, name="Mill bridge", area="120", precipitation="900", forest="40", region="west")
    result = example_page.text("#calc-results")
    assert "Mill bridge" in result
    assert 8 == example_page.run("return document.querySelectorAll('#calc-results tbody tr').length")
    assert {"growth curve", "quantile regression", "routes combined"} <= set(
        re.findall(r"growth curve|quantile regression|routes combined", result)
    )
    assert "Generalized skew" in result


def test_a_site_beyond_the_gauges_is_warned_of(example_page):
    fill_form(example_page, area="90000", precipitation="900", forest="40", region="west")
    assert "area is above the gauges' range" in example_page.text("#calc-results [role=alert]")


@pytest.mark.parametrize(
    ("values", "explained"),
    [
        ({"area": "", "precipitation": "900", "forest": "40", "region": "west"}, "area is missing"),
        ({"area": "a lot", "precipitation": "900", "forest": "40", "region": "west"}, "not a number"),
        ({"area": "12,5", "precipitation": "900", "forest": "40", "region": "west"}, "decimals after a point"),
        ({"area": "-3", "precipitation": "900", "forest": "40", "region": "west"}, "must be above 0"),
        ({"area": "12", "precipitation": "900", "forest": "140", "region": "west"}, "between 0 and 100"),
        ({"area": "12", "precipitation": "900", "forest": "40", "region": ""}, "region is missing"),
        ({"area": "12", "precipitation": "900", "forest": "40", "region": "west", "upstream_gauge": "77"}, "not a gauge"),
        ({"area": "1e999", "precipitation": "900", "forest": "40", "region": "west"}, "must be above 0"),
    ],
)  # fmt: skip
def test_nonsense_is_explained_and_gives_no_number(example_page, values, explained):
    fill_form(example_page, **values)
    assert explained in example_page.text("#calc-problems")
    assert "" == example_page.text("#calc-results")


@pytest.mark.parametrize(
    ("text", "explained"),
    [
        ("", "no table"),
        ("area,region\n12,west\n", "lacks precipitation, forest"),
        ("area;precipitation;forest;region\n12;900;x;west\n13;900;40;west\n", "Row 2: forest is “x”"),
        ("area,precipitation,forest,region\n12,5,900,40,west\n", "comma inside a number"),
        ("area,area,precipitation,forest,region\n1,1,900,40,west\n", "twice"),
    ],
)
def test_a_faulty_table_of_sites_is_explained_by_row(example_page, text, explained):
    example_page.run("calculator.readMany(arguments[0])", text)
    assert explained in example_page.text("#calc-problems")


def download_folder(page, folder):
    page.command("Browser.setDownloadBehavior", behavior="allow", downloadPath=str(folder))


def downloaded(folder, seconds=10.0):
    end = time.monotonic() + seconds
    while not (files := [p for p in folder.iterdir() if p.suffix == ".csv"]):
        assert time.monotonic() < end, "nothing was downloaded"
        time.sleep(0.05)
    return files[0].read_text(encoding="utf-8-sig")


def test_calculator_results_download_as_csv(example_page, tmp_path):
    download_folder(example_page, tmp_path)
    fill_form(example_page, name="=1+1", area="120", precipitation="900", forest="40", region="west")
    example_page.run("document.getElementById('calc-download').click()")
    rows = list(csv.DictReader(io.StringIO(downloaded(tmp_path))))
    assert {"'=1+1"} == {row["name"] for row in rows}
    assert 24 == len(rows)


def test_every_table_gets_its_tools(example_page):
    example_page.run("document.querySelectorAll('details').forEach((one) => { one.open = true; })")
    example_page.run("document.querySelectorAll('main table').forEach((one, i) => window.equipTable(one, i))")
    assert 0 == example_page.run(
        "return [...document.querySelectorAll('main table')].filter((one) => !one.dataset.equipped).length"
    )
    assert example_page.run("return document.querySelectorAll('main button.sort').length") > 100


def test_a_table_sorts_filters_and_downloads_without_formulas(example_page, tmp_path):
    download_folder(example_page, tmp_path)
    example_page.run(
        """
        const rows = [["0007", "12.5"], ["=cmd", "3 020"], ["0101", "\u2212" + "1"], ["b", ""], ...Array.from({length: 10}, (_, i) => ["x" + i, String(i)])];
        const frame = make("div", {class: "table"}, make("table", {id: "probe", "data-title": "A probe"},
            make("thead", {}, make("tr", {}, make("th", {}, "gauge"), make("th", {}, "flow"))),
            make("tbody", {}, ...rows.map(([a, b]) => make("tr", {}, make("th", {}, a), make("td", {}, b.replace(" ", "\u202f")))))));
        document.querySelector("main").append(frame);
        equipTable(document.getElementById("probe"));
        """
    )
    column = "return [...document.querySelectorAll('#probe tbody td')].map((one) => one.textContent)"
    flow = example_page.find("#probe thead th:nth-child(2) button")
    example_page.run("arguments[0].click()", flow)
    first = example_page.run(column)
    assert ["\u22121", "0", "1"] == first[:3]
    assert ["12.5", "3\u202f020", ""] == first[-3:]
    assert "ascending" == example_page.find("#probe thead th:nth-child(2)").get_attribute("aria-sort")
    example_page.run("arguments[0].click()", flow)
    assert ["3\u202f020", "12.5"] == example_page.run(column)[:2]
    assert "" == example_page.run(column)[-1]
    example_page.run(
        "const f = document.querySelector(\"input[aria-label='Filter rows: A probe']\"); f.value = '=cmd'; f.dispatchEvent(new Event('input'))"
    )
    example_page.wait(
        "return [...document.querySelectorAll('#probe tbody tr')].filter((row) => !row.hidden).length === 1"
    )
    example_page.run("document.querySelector(\"button[aria-label='Download as CSV: A probe']\").click()")
    assert [["gauge", "flow"], ["'=cmd", "3020"]] == list(csv.reader(io.StringIO(downloaded(tmp_path))))


def test_names_from_users_stay_text_in_search_panel_and_tables(example_page):
    field = example_page.find("#site-search")
    field.send_keys(HOSTILE_GAUGE, Keys.ENTER)
    assert "<img src=x onerror=" in example_page.text("#site-title")
    frame = example_page.find("#map-frame")
    example_page.run("arguments[0].scrollIntoView({block: 'center'})", frame)
    x, y = point_of(example_page, HOSTILE_GAUGE)
    ActionChains(example_page.driver).move_to_element_with_offset(frame, int(x), int(y)).perform()
    time.sleep(0.5)
    assert example_page.run("return window.harmed") is None
    assert 0 == example_page.run("return document.querySelectorAll('img[src=x]').length")


def test_keyboard_reaches_search_map_calculator_and_sort_buttons(example_page):
    body = example_page.find("body")
    body.send_keys(Keys.TAB)
    assert "#main" == example_page.run("return document.activeElement.getAttribute('href')")
    example_page.run("document.getElementById('site-search').focus()")
    seen = []
    for _ in range(12):
        ActionChains(example_page.driver).send_keys(Keys.TAB).perform()
        seen.append(example_page.run("return document.activeElement.id || document.activeElement.type"))
    assert ["map-view", "checkbox"] == seen[:2]
    assert {"map-frame", "map-nearer", "map-farther", "map-whole"} <= set(seen)
    outline = example_page.run("return getComputedStyle(document.activeElement).outlineStyle")
    assert "none" != outline


@pytest.mark.parametrize("width_mm", [pytest.param(210, id="A4"), pytest.param(215.9, id="Letter")])
def test_print_cuts_off_no_figure_and_no_table(example_page, width_mm):
    inner = int((width_mm - 2 * 16) / 25.4 * 96)
    page_height = int((279.4 - 38) / 25.4 * 96)
    example_page.command(
        "Emulation.setDeviceMetricsOverride", width=inner, height=1000, deviceScaleFactor=1, mobile=False
    )
    example_page.command("Emulation.setEmulatedMedia", media="print")
    cut = example_page.run(
        """
        const edge = document.documentElement.clientWidth + 1;
        return [...document.querySelectorAll("main img, main table, main p, main pre, main dl")]
          .filter((one) => one.getBoundingClientRect().right > edge && one.getBoundingClientRect().width > 0)
          .map((one) => `${one.tagName} ${one.closest("section")?.id}: ${(one.caption ?? one).textContent.slice(0, 60)} ${one.getBoundingClientRect().right}`);
        """
    )
    assert [] == cut
    tallest = example_page.run(
        "return Math.max(...[...document.querySelectorAll('main figure')].map((one) => one.offsetHeight))"
    )
    assert 0 < tallest < page_height
    assert "none" == example_page.run("return getComputedStyle(document.querySelector('nav')).display")


@pytest.mark.parametrize("size", [(8.27, 11.69), (8.5, 11.0)], ids=["A4", "Letter"])
def test_page_prints_to_pdf_of_the_wanted_size(example_page, size):
    width, height = size
    printed = example_page.command(
        "Page.printToPDF", paperWidth=width, paperHeight=height, preferCSSPageSize=False, printBackground=True
    )
    pdf = base64.b64decode(printed["data"])
    boxes = re.findall(rb"/MediaBox\s*\[\s*0\s+0\s+([\d.]+)\s+([\d.]+)\s*\]", pdf)
    assert 10 < len(boxes)
    for wide, tall in boxes:
        assert float(wide) == pytest.approx(width * 72, abs=1), "points; Chromium rounds to its own pixels"
        assert float(tall) == pytest.approx(height * 72, abs=1)


@pytest.mark.parametrize(("size", "scheme"), [("desktop", "light"), ("tablet", "dark")])
def test_axe_finds_nothing_serious(chromium, example_results, size, scheme):
    from importlib.resources import files

    axe = files("axe_core_python").joinpath("axe.min.js").read_text(encoding="utf-8")
    chromium.open(example_results / "report.html", f"#site={GAUGE}", size, scheme)
    fill_form(chromium, area="90000", precipitation="900", forest="40", region="west")
    chromium.run("document.querySelectorAll('main table').forEach((one, i) => window.equipTable(one, i))")
    chromium.run(axe)
    chromium.driver.set_script_timeout(120)
    found = chromium.driver.execute_async_script(
        "const done = arguments[0]; axe.run(document, {resultTypes: ['violations']}).then((r) => done(r.violations), (e) => done(String(e)))"
    )
    assert isinstance(found, list), found
    serious = [
        f"{one['id']} ({one['impact']}): {[n['target'] for n in one['nodes'][:3]]} {one['nodes'][0]['failureSummary'][:300]}"
        for one in found
        if one["impact"] in ("serious", "critical")
    ]
    assert [] == serious


@pytest.mark.parametrize("size", ["desktop", "tablet"])
def test_nothing_is_wider_than_the_window(chromium, example_results, size):
    chromium.open(example_results / "report.html", f"#site={GAUGE}", size)
    assert 0 >= chromium.run("return document.documentElement.scrollWidth - innerWidth")


def test_the_page_is_small_and_opens_quickly(chromium, example_results):
    assert (example_results / "report.html").stat().st_size < 6e6
    chromium.command("Performance.enable", timeDomain="threadTicks")
    chromium.open(example_results / "report.html")
    metrics = {one["name"]: one["value"] for one in chromium.command("Performance.getMetrics")["metrics"]}
    assert 0 < metrics["TaskDuration"] < 3.0, (
        "seconds of processor time, so that a busy machine does not matter"
    )
