"""The example region one year later: every planted cause is found where it was planted, and shares sum to the change."""

from __future__ import annotations

import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from wrackline.report.style import without_figures
from wrackline.stages import estimate
from wrackline.stages.compare import draw_changes, this_run
from wrackline.stages.compare_page import biggest_movers, change_section, comparison_tables, tell_mover
from wrackline.stages.comparison import SHARES, Comparison, compare_editions
from wrackline.stages.counterfactual import MODEL_STAGES
from wrackline.stages.running import StudyFiles
from wrackline.study.edition_differences import OWN_CAUSES
from wrackline.study.loading import load_config

EVERY = 5
"""Every fifth gauge of the example: enough for its three regions, and quick."""
REVISED, CHANGED, ADDED = "0420200", "0410725", "0410050"
"""Gauges with the revised peak, with the changed attribute, and the one that is added."""
PARTS: dict[str, Any] = {
    "pooling": {"simulations": 100, "close_call_simulations": 100, "growth_simulations": 100},
    "at_site": {"alternatives": False},
    "skew": {"surface": False, "by_region": False},
    "regression": {"attributes": ["area", "precipitation"]},
}
INPUTS = {"basins": "", "regions": "", "redundancy": ""}
TABLES = ("gauges", "peaks", "peaks_later", "thresholds", "periods", "ledger", "targets")


def read(path: Path) -> pd.DataFrame:
    return pd.read_csv(path, dtype=str, keep_default_na=False)


def prepare(study: Path, later: bool) -> StudyFiles:
    """Thin the example out; make it the later edition where wanted."""
    folder = study.parent
    tables = {name: read(folder / f"{name}.csv") for name in TABLES}
    gauges = tables["gauges"]
    kept = {*gauges["gauge_id"][::EVERY], REVISED, CHANGED} - {ADDED}
    if later:
        tables["peaks"] = tables["peaks_later"]
        chosen = tables["peaks"]["gauge_id"].eq(REVISED) & tables["peaks"]["water_year"].eq("2005")
        assert 1 == chosen.sum()
        tables["peaks"].loc[chosen, "flow"] = str(3 * float(tables["peaks"].loc[chosen, "flow"].iloc[0]))
        wetter = gauges["gauge_id"] == CHANGED
        gauges.loc[wetter, "precipitation"] = str(1.3 * float(gauges.loc[wetter, "precipitation"].iloc[0]))
        kept.add(ADDED)
    for name in TABLES[:-1]:
        tables[name][tables[name]["gauge_id"].isin(kept)].to_csv(folder / f"{name}.csv", index=False)
    targets = tables["targets"].head(6).copy()
    for column in ("upstream_gauge", "downstream_gauge"):
        targets[column] = [name if name in kept else "" for name in targets[column]]
    targets.to_csv(folder / "targets.csv", index=False)
    files = StudyFiles(load_config(study), study)
    with without_figures():
        for run in [*MODEL_STAGES.values(), estimate.run]:
            run(files)
    return files


@pytest.fixture(scope="module")
def editions(
    tmp_path_factory: pytest.TempPathFactory, copy_example: Callable[..., Path]
) -> tuple[StudyFiles, StudyFiles]:
    place = tmp_path_factory.mktemp("drill")
    studies = [copy_example(place / name, **PARTS, inputs=INPUTS) for name in ("A", "B")]
    return prepare(studies[0], later=False), prepare(studies[1], later=True)


@pytest.fixture(scope="module")
def found(editions: tuple[StudyFiles, StudyFiles], tmp_path_factory: pytest.TempPathFactory) -> Comparison:
    scratch = tmp_path_factory.mktemp("scratch")
    compared = compare_editions(*map(this_run, editions), scratch, editions[1])
    shutil.rmtree(scratch)
    return compared


def share(found: Comparison, cause: str, site: str) -> float:
    place = [name for _, name in found.keys.sites].index(site)
    return float(found.shares[cause][place, found.rare])


def touched(found: Comparison, cause: str) -> set[str]:
    return {change.site_id for change in found.inputs if change.cause == cause}


def test_shares_sum_to_the_change_at_every_site_and_probability(found: Comparison) -> None:
    assert () == found.notes
    assert found.change_percent.shape == (len(found.keys.sites), len(found.keys.aeps))
    np.testing.assert_allclose(found.change_percent, sum(found.shares.values()), atol=1e-9, rtol=0)


def test_same_software_has_no_share(found: Comparison) -> None:
    assert 0.0 == np.abs(found.shares["software"]).max()


def test_nothing_of_the_change_is_left_to_how_gauges_stand_together(
    editions: tuple[StudyFiles, StudyFiles], tmp_path: Path
) -> None:
    same = compare_editions(this_run(editions[0]), this_run(editions[0]), tmp_path, editions[0])
    assert [] == same.inputs
    # Sites estimated apart from the rest of the region: differences of rounding alone.
    assert np.abs(same.shares["regional_models"]).max() < 1e-9
    assert [] == [site for site in biggest_movers(same) if abs(same.change_percent[site]).max() > 1e-9]


def test_revised_peak_is_found_at_its_gauge_alone(found: Comparison) -> None:
    assert {REVISED} == touched(found, "own_revised_peaks")
    assert abs(share(found, "own_revised_peaks", REVISED)) > 1.0
    places = np.flatnonzero(np.abs(found.shares["own_revised_peaks"]).max(axis=1) > 0)
    assert [("gauge", REVISED)] == [found.keys.sites[i] for i in places]


def test_changed_attribute_is_found_at_its_gauge_alone(found: Comparison) -> None:
    assert {CHANGED} == touched(found, "site_attributes")
    assert abs(share(found, "site_attributes", CHANGED)) > 0.1
    places = np.flatnonzero(np.abs(found.shares["site_attributes"]).max(axis=1) > 0)
    assert [("gauge", CHANGED)] == [found.keys.sites[i] for i in places]


def test_new_year_is_found_at_the_gauges_that_use_it(
    found: Comparison, editions: tuple[StudyFiles, StudyFiles]
) -> None:
    rows = read(editions[1].work("intake") / "accounting.csv")
    new = {
        (change.site_id, change.place.split()[-1])
        for change in found.inputs
        if change.cause == "own_new_peaks"
    }
    used = {
        gauge
        for gauge, year, fate in rows[["gauge_id", "water_year", "fate"]].to_numpy()
        if (gauge, year) in new and fate != "excluded"
    }
    places = np.flatnonzero(np.abs(found.shares["own_new_peaks"]).max(axis=1) > 0)
    assert {("gauge", gauge) for gauge in used & set(found.keys.gauges)} == {
        found.keys.sites[i] for i in places
    }
    assert len(places) >= 10


def test_sites_without_own_changes_show_regional_shares_only(found: Comparison) -> None:
    own = set().union(*(touched(found, cause) for cause in (*OWN_CAUSES, "site_attributes")))
    quiet = [i for i, (kind, site) in enumerate(found.keys.sites) if kind == "target" or site not in own]
    assert len(quiet) >= 6
    for cause in (*OWN_CAUSES, "site_attributes", "configuration", "software"):
        assert 0.0 == np.abs(found.shares[cause][quiet]).max()
    assert np.abs(found.shares["regional_models"][quiet]).max() > 0.0


def test_added_gauge_is_told_and_not_compared(found: Comparison) -> None:
    assert ADDED not in [site for _, site in found.keys.sites]
    assert [("gauge", ADDED)] == [(kind, site) for kind, site, _ in found.missing]


def test_change_beyond_the_stated_interval_is_marked(found: Comparison) -> None:
    outside = (found.new_flow < found.old_lower) | (found.new_flow > found.old_upper)
    assert outside.tolist() == found.beyond.tolist()


def test_biggest_movers_are_told_with_their_reasons(found: Comparison) -> None:
    place = [name for _, name in found.keys.sites].index(REVISED)
    assert "revised peaks (water year 2005 flow from" in tell_mover(found, place)
    movers = biggest_movers(found)
    ratio = np.abs(np.log(found.new_flow[movers, found.rare] / found.old_flow[movers, found.rare]))
    assert sorted(ratio, reverse=True) == ratio.tolist()


def test_page_and_tables_name_every_cause(
    found: Comparison, editions: tuple[StudyFiles, StudyFiles], tmp_path: Path
) -> None:
    tables = {table.name: table.frame for table in comparison_tables(found)}
    assert {"changes", "change_attribution", "input_changes"} == set(tables)
    assert set(SHARES) <= set(tables["change_attribution"])
    assert len(found.inputs) == len(tables["input_changes"])
    section = change_section(found)
    assert "change" == section.key
    assert any(
        f"Gauge {site}" in text
        for text in section.paragraphs
        for _, site in [found.keys.sites[biggest_movers(found)[0]]]
    )
    intake = editions[1].work("intake")
    sites = pd.concat(
        [
            read(intake / "gauges.csv").rename(columns={"gauge_id": "site"}),
            read(intake / "targets.csv").rename(columns={"target_id": "site"}),
        ]
    )
    draw_changes(found, sites, tmp_path)
    assert {figure.file for figure in section.figures} == {path.name for path in tmp_path.iterdir()}
