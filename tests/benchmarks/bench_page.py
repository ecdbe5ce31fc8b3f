"""Size of the study page, and how long it takes to open, for 120, 1,000 and 5,000 gauges of invented results.

    python tests/benchmarks/bench_page.py [GAUGES ...]

The results are drawn at random in the shape that the stages give them; no stage is run. The page is opened in
headless Chromium from disk, as the tests in `tests/browser` do; without Chromium sizes alone are told.
"""

from __future__ import annotations

import shutil
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
import pandas as pd

from wrackline.hydrology.records import PeakRecords, exact_records
from wrackline.report.glance import list_peaks
from wrackline.report.page import StudyPage, render_page
from wrackline.report.page_data import build_page_data
from wrackline.study.config import StudyConfig
from wrackline.study.contribution import PageTable, Section
from wrackline.study.provenance import Run
from wrackline.study.study_layers import study_layers
from wrackline.study.tables import Column, Table

SIZES = (120, 1000, 5000)
LIMITS_MB = {120: 6.0, 1000: 15.0}
YEARS = 45
TABLES, COLUMNS = 6, 8
CONFIG = StudyConfig()
FEW_REGIONS = 6


def invent_sites(n: int, key: str, rng: np.random.Generator) -> pd.DataFrame:
    width = 8.0 * np.sqrt(n / 1000)
    return pd.DataFrame(
        {
            key: [f"{key[0].upper()}{i:05d}" for i in range(n)],
            "name": [f"River number {i} at an invented place" for i in range(n)],
            "latitude": 40 + width * rng.random(n),
            "longitude": width * rng.random(n),
            "area_km2": 10 ** rng.uniform(1, 4, n),
            "region": [f"region {i % FEW_REGIONS}" for i in range(n)],
        }
    )


def invent_basins(gauges: pd.DataFrame, folder: Path, rng: np.random.Generator) -> None:
    """Ragged outlines of 120 corners around every gauge."""
    turn = np.linspace(0, 2 * np.pi, 120, endpoint=False)
    rows = []
    for site in gauges.itertuples():
        radius = 0.09 * (1 + 0.2 * rng.random(len(turn)))
        x, y = site.longitude + radius * np.cos(turn), site.latitude + radius * np.sin(turn)
        ring = ", ".join(f"{a:.6f} {b:.6f}" for a, b in zip([*x, x[0]], [*y, y[0]], strict=True))
        rows.append((site.gauge_id, f"POLYGON (({ring}))"))
    pd.DataFrame(rows, columns=["site_id", "wkt"]).to_csv(folder / "basins.csv", index=False)


def invent_records(ids: list[str], rng: np.random.Generator) -> PeakRecords:
    offsets = np.arange(len(ids) + 1) * YEARS
    year = np.tile(np.arange(1980, 1980 + YEARS), len(ids))
    return exact_records(ids, offsets, year, 10 ** rng.normal(2, 0.3, len(year)))


def invent_estimates(
    ids: list[str], key: str, route: str, names: tuple[str, ...], rng: np.random.Generator
) -> Table:
    aeps = CONFIG.aeps.gauges if key == "gauge_id" else CONFIG.aeps.targets
    n = len(ids) * len(names) * len(aeps)
    flow = 10 ** rng.normal(2, 0.3, n)
    columns = {
        key: np.repeat(ids, len(names) * len(aeps)),
        "aep": np.tile(aeps, len(ids) * len(names)),
        route: np.tile(np.repeat(names, len(aeps)), len(ids)),
        "flow": flow, "lower": 0.7 * flow, "upper": 1.4 * flow, "se_log10": 0.1,
        "adopted": np.tile(np.repeat([name == names[0] for name in names], len(aeps)), len(ids)),
    }  # fmt: skip
    frame = pd.DataFrame(columns)
    return Table(f"{key[:-3]}_estimates", frame, tuple(Column(name, "", "") for name in frame))


def invent_positions(records: PeakRecords) -> Table:
    aep = np.tile((np.arange(YEARS) + 1) / (YEARS + 1), records.n_gauges)
    frame = pd.DataFrame(
        {
            "gauge_id": np.repeat(np.array(records.gauge_ids, dtype=object), YEARS),
            "water_year": records.water_year,
            "aep": aep,
        }
    )
    return Table("plotting_positions", frame, tuple(Column(name, "", "") for name in frame))


def invent_page(n: int) -> str:
    rng = np.random.default_rng(n)
    gauges, targets = invent_sites(n, "gauge_id", rng), invent_sites(n // 5, "target_id", rng)
    ids = gauges["gauge_id"].tolist()
    records = invent_records(ids, rng)
    sources = ("record_and_regression", "weighted_skew", "station", "regression")
    routes = ("growth_curve", "quantile_regression", "routes_combined")
    tables = {
        "gauge_estimates": invent_estimates(ids, "gauge_id", "source", sources, rng),
        "target_estimates": invent_estimates(
            targets["target_id"].tolist(), "target_id", "route", routes, rng
        ),
        "plotting_positions": invent_positions(records),
    }
    tables["target_estimates"].frame["warnings"] = ""
    with tempfile.TemporaryDirectory() as folder:
        invent_basins(gauges, Path(folder), rng)
        layers = study_layers(CONFIG, Path(folder), gauges, targets, tables)
    listed = tuple(
        PageTable(f"Table {i}", tuple(f"column {j}" for j in range(COLUMNS)),
                  tuple((gauge, *(f"{v:.3g}" for v in rng.random(COLUMNS - 1))) for gauge in ids), "tables/x.csv")
        for i in range(TABLES)
    )  # fmt: skip
    page = StudyPage(
        CONFIG, Run("ab" * 32, {}, {}), (), (), None, (Section("data", "Data", tables=listed),), {}, (), None,
        list_peaks(records, gauges, 1.0),
        data=build_page_data(CONFIG, tables, {}, gauges, targets, records, layers),
    )  # fmt: skip
    return render_page(page)


def time_opening(path: Path) -> float | None:
    """Seconds from asking for the page until map and curve are ready; None without Chromium."""
    browser, driver = shutil.which("chromium"), shutil.which("chromedriver")
    if not (browser and driver):
        return None
    from selenium import webdriver
    from selenium.webdriver.chrome.service import Service

    options = webdriver.ChromeOptions()
    options.binary_location = browser
    for option in ("--headless=new", "--no-sandbox", "--disable-gpu", "--disable-dev-shm-usage"):
        options.add_argument(option)
    opened = webdriver.Chrome(options=options, service=Service(driver))
    try:
        opened.get("about:blank")
        started = time.perf_counter()
        opened.get(path.as_uri())
        while not opened.execute_script(
            "return document.getElementById('map-section').dataset.ready === 'yes'"
        ):
            time.sleep(0.02)
        return time.perf_counter() - started
    finally:
        opened.quit()


def measure() -> list[dict[str, object]]:
    """Rows for `run_all.py`: the page's size over its limit (figures excluded); opening times are told by `main`."""
    rows: list[dict[str, object]] = []
    for n, limit in LIMITS_MB.items():
        ratio = len(invent_page(n).encode("utf-8")) / 1e6 / limit
        rows.append(
            {"kernel": "size of the page", "size": f"{n} gauges", "floor": f"limit of {limit:g} MB", "ratio": ratio,
             "ratio_min": ratio, "ratio_max": ratio, "target": 1.0}
        )  # fmt: skip
    return rows


def main() -> None:
    for n in [int(text) for text in sys.argv[1:]] or SIZES:
        started = time.perf_counter()
        text = invent_page(n)
        made = time.perf_counter() - started
        with tempfile.TemporaryDirectory() as folder:
            path = Path(folder) / "report.html"
            path.write_text(text, encoding="utf-8")
            opening = time_opening(path)
            size = path.stat().st_size / 1e6
        limit = f" (limit {LIMITS_MB[n]:g})" if n in LIMITS_MB else ""
        opened = "no Chromium to open it" if opening is None else f"opens in {opening:.1f} s"
        print(f"{n} gauges: {size:.1f} MB{limit} without figures, {opened}, made in {made:.1f} s")


if __name__ == "__main__":
    main()
