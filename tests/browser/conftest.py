"""A headless Chromium without a network, and the page of a small run of the example study to look at."""

from __future__ import annotations

import csv
import os
import shutil
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest

STAGES = (
    "intake", "screen", "dependence", "atsite", "skew", "weight", "pool", "regress", "validate", "estimate", "publish",
)  # fmt: skip
HOSTILE_GAUGE = "0410050"
HOSTILE_NAME = "=Weir</script><img src=x onerror=\"window.harmed='yes'\"><b>O'Dam</b>"
SIZES = {"desktop": (1280, 900), "tablet": (820, 1180)}
READY = "return document.getElementById('map-section')?.dataset.ready === 'yes'"


def find_programs() -> tuple[str, str]:
    """Return Chromium and its driver; without them the tests are skipped, or fail where they must run."""
    browser = next(
        (p for n in ("chromium", "chromium-browser", "google-chrome") if (p := shutil.which(n))), None
    )
    driver = shutil.which("chromedriver")
    if browser and driver:
        return browser, driver
    missing = " and ".join(
        name for name, found in (("chromium", browser), ("chromedriver", driver)) if not found
    )
    text = (
        f"The tests in a browser need {missing}. On Debian: apt-get install chromium chromium-driver; "
        "on Ubuntu and elsewhere: install Chromium or Chrome and the chromedriver of the same version."
    )
    if os.environ.get("CI", "").lower() == "true":
        pytest.fail(text)
    pytest.skip(text)


@pytest.fixture(scope="session")
def example_results(
    tmp_path_factory: pytest.TempPathFactory, copy_example: Callable[..., Path], quick_parts: dict[str, Any]
) -> Path:
    """Run the example study with few simulations, one gauge bearing a hostile name; give back its results folder."""
    find_programs()
    study = copy_example(
        tmp_path_factory.mktemp("browser") / "study",
        **quick_parts,
    )
    gauges = study.parent / "gauges.csv"
    with gauges.open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    for row in rows:
        if row["gauge_id"] == HOSTILE_GAUGE:
            row["name"] = HOSTILE_NAME
    with gauges.open("w", encoding="utf-8", newline="") as file:
        writer = csv.DictWriter(file, rows[0])
        writer.writeheader()
        writer.writerows(rows)
    for stage in STAGES:
        subprocess.run(
            [sys.executable, "-P", "-m", f"wrackline.stages.{stage}", str(study)], check=True, capture_output=True, text=True,
            env=os.environ | {"OPENBLAS_NUM_THREADS": "1"},
        )  # fmt: skip
    return study.parent / "results"


class Page:
    """A page open in Chromium, with the questions that tests ask of it."""

    def __init__(self, driver: Any) -> None:
        self.driver = driver

    def open(self, path: Path, fragment: str = "", size: str = "desktop", scheme: str = "light") -> None:
        """Open a file afresh, at a size and in a colour scheme, and wait until its scripts are done."""
        width, height = SIZES[size]
        self.driver.get("about:blank")
        self.driver.get_log("browser")
        self.driver.get_log("performance")
        self.command(
            "Emulation.setDeviceMetricsOverride",
            width=width,
            height=height,
            deviceScaleFactor=1,
            mobile=False,
        )
        self.command(
            "Emulation.setEmulatedMedia",
            media="",
            features=[{"name": "prefers-color-scheme", "value": scheme}],
        )
        self.driver.get(path.as_uri() + fragment)
        self.wait(READY)

    def command(self, name: str, **parameters: Any) -> Any:
        return self.driver.execute_cdp_cmd(name, parameters)

    def run(self, script: str, *arguments: Any) -> Any:
        return self.driver.execute_script(script, *arguments)

    def wait(self, script: str, seconds: float = 30.0) -> Any:
        """Wait until a script gives something true, and give that back."""
        end = time.monotonic() + seconds
        while not (found := self.run(script)):
            assert time.monotonic() < end, f"never true: {script}"
            time.sleep(0.05)
        return found

    def find(self, selector: str) -> Any:
        return self.driver.find_element("css selector", selector)

    def text(self, selector: str) -> str:
        return str(self.run("return document.querySelector(arguments[0]).innerText", selector))

    def complaints(self) -> list[str]:
        """Warnings and errors of the console since the page was opened."""
        return [
            entry["message"]
            for entry in self.driver.get_log("browser")
            if entry["level"] in ("SEVERE", "WARNING")
        ]


@pytest.fixture(scope="session")
def chromium(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Page]:
    """One headless Chromium with its network switched off."""
    from selenium import webdriver
    from selenium.webdriver.chrome.service import Service

    browser, driver = find_programs()
    options = webdriver.ChromeOptions()
    options.binary_location = browser
    for option in (
        "--headless=new",
        "--no-sandbox",
        "--disable-gpu",
        "--disable-dev-shm-usage",
        "--hide-scrollbars",
    ):
        options.add_argument(option)
    options.set_capability("goog:loggingPrefs", {"browser": "ALL", "performance": "ALL"})
    opened = webdriver.Chrome(options=options, service=Service(driver))
    page = Page(opened)
    page.command("Network.enable")
    page.command(
        "Network.emulateNetworkConditions", offline=True, latency=0, downloadThroughput=0, uploadThroughput=0
    )
    yield page
    opened.quit()


@pytest.fixture
def example_page(chromium: Page, example_results: Path) -> Page:
    """The example's page, freshly opened."""
    chromium.open(example_results / "report.html")
    return chromium
