"""The stage that fits every gauge: its tables, the ledger's say, and what stays in the tables without a fit."""

from __future__ import annotations

import json
import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

import wrackline
from wrackline.stages import atsite, intake, screen
from wrackline.stages.running import StudyFiles
from wrackline.study.contribution import read_contribution
from wrackline.study.loading import load_config
from wrackline.study.tables import read_table

FT3 = 0.3048**3
GAUGES = ("01", "02", "03", "04", "05", "06", "07", "08")
STUDY = """\
inputs: {thresholds: thresholds.csv, ledger: ledger.csv}
units: {flow: ft3/s, area: mi2}
pooling: {regions: one}
at_site: {page_figures: ["02", "99", "06"], all_figures: none}
"""


def write_study(folder: Path) -> Path:
    """Eight gauges of forty years: 02 has historic floods, 03 many zeros, 04 an analyst's threshold, 05 a dam, 06 low floods."""
    rng = np.random.default_rng(21)
    rows, flows = [], {}
    for number, gauge in enumerate(GAUGES):
        flow = np.round(np.exp(rng.normal(6.0 + 0.2 * number, 0.5, 40)), 1)
        if gauge == "03":
            flow[:24] = 0.0
        if gauge == "06":
            flow[[3, 9, 20]] = 0.5, 1.0, 2.0
        flows[gauge] = flow
        rows += [(gauge, 1971 + i, value, "systematic") for i, value in enumerate(flow)]
    rows += [("02", 1901, 6000.0, "historic"), ("08", 1969, 450.0, "systematic")]
    peaks = pd.DataFrame(rows, columns=["gauge_id", "water_year", "flow", "kind"])
    folder.mkdir(parents=True)
    peaks.to_csv(folder / "peaks.csv", index=False)
    lines = [
        f"{gauge},River {gauge},{45 + i / 3},{-120 + i / 3},{100 + 40 * i},{str(gauge == '05').lower()}"
        for i, gauge in enumerate(GAUGES)
    ]
    (folder / "gauges.csv").write_text(
        "gauge_id,name,latitude,longitude,area,regulated\n" + "\n".join(lines) + "\n", encoding="utf-8"
    )
    (folder / "thresholds.csv").write_text(
        "gauge_id,first_year,last_year,low\n02,1890,1970,5000\n", encoding="utf-8"
    )
    (folder / "ledger.csv").write_text(
        "date,by,subject,action,why,gauge_id,water_year,value\n"
        "2025-01-01,A,gauge,keep,good record,04,,\n"
        "2025-02-01,A,gauge,low_flood_threshold,first guess,04,,900\n"
        "2025-03-01,A,gauge,low_flood_threshold,backwater below this,04,,600\n",
        encoding="utf-8",
    )
    (folder / "study.yaml").write_text(STUDY, encoding="utf-8")
    return folder / "study.yaml"


def run_stages(study_file: Path) -> Path:
    study = StudyFiles(load_config(study_file), study_file)
    for stage in (intake, screen, atsite):
        stage.run(study)
    return study.work("atsite")


@pytest.fixture(scope="module")
def work(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return run_stages(write_study(tmp_path_factory.mktemp("atsite") / "study"))


@pytest.fixture(scope="module")
def table(work: Path) -> Callable[[str], pd.DataFrame]:
    contribution = read_contribution(work)
    frames = {t.name: t.frame for t in contribution.tables}
    frames["gauge_moments"] = read_table(work / "gauge_moments.csv", text=("reasons",))
    frames["gauge_estimates"] = read_table(work / "gauge_estimates.csv", text=("source",))
    return lambda name: frames[name].copy()


def test_moments_have_the_columns_others_rely_on_in_order_of_gauges(table: Any) -> None:
    moments = table("gauge_moments")
    expected = {
        "gauge_id", "n_peaks", "n_low_outliers", "low_outlier_threshold", "mean_log10", "sd_log10", "station_skew",
        "station_skew_mse", "generalized_skew", "generalized_skew_mse", "weighted_skew", "weighted_skew_mse",
    }  # fmt: skip
    assert expected <= set(moments.columns)
    assert list(GAUGES) == moments["gauge_id"].tolist()
    assert moments["weighted_skew"].isna().all()


def test_a_gauge_without_a_fit_stays_in_the_table_with_its_reason(table: Any) -> None:
    moments = table("gauge_moments").set_index("gauge_id")
    assert moments.loc["03", "reasons"].startswith("24 of 40 systematic peaks are zero")
    assert "regulated" in moments.loc["05", "reasons"]
    assert moments.loc[["03", "05"], "mean_log10"].isna().all()
    assert [40, 40] == moments.loc[["03", "05"], "n_peaks"].tolist()
    assert {"03", "05"}.isdisjoint(table("gauge_estimates")["gauge_id"])
    warnings = table("gauge_warnings")
    assert {"03", "05"} == set(warnings.loc[warnings["code"] == "not_fitted", "gauge_id"])


def test_numbers_are_those_of_a_single_fit_in_the_declared_unit(work: Path, table: Any) -> None:
    peaks = pd.read_csv(work.parents[1] / "peaks.csv", dtype={"gauge_id": str})
    moments, estimates = table("gauge_moments").set_index("gauge_id"), table("gauge_estimates")
    for gauge in ("01", "06"):
        alone = wrackline.fit(peaks[peaks["gauge_id"] == gauge], flow_unit="ft3/s").to_dict()
        assert alone["log10"]["mean"] == pytest.approx(moments.loc[gauge, "mean_log10"], abs=1e-9)
        assert alone["log10"]["skew"] == pytest.approx(moments.loc[gauge, "station_skew"], abs=1e-7)
        assert alone["low_outliers"]["count"] == moments.loc[gauge, "n_low_outliers"]
        own = estimates[estimates["gauge_id"] == gauge]
        for name in ("aep", "flow", "lower", "upper"):
            expected = [row[name] for row in alone["quantiles"]]
            np.testing.assert_allclose(expected, own[name], rtol=1e-6, err_msg=f"{gauge} {name}")


def test_estimates_rest_on_the_record_and_are_adopted_where_the_gauge_is_used(table: Any) -> None:
    estimates = table("gauge_estimates")
    assert {"station"} == set(estimates["source"])
    used = table("gauge_moments").set_index("gauge_id")["used"]
    assert (used.loc[estimates["gauge_id"]].to_numpy() == estimates["adopted"].to_numpy()).all()
    assert (estimates["lower"] < estimates["flow"]).all()
    assert (estimates["flow"] < estimates["upper"]).all()


def test_historic_peak_and_its_period_enter_the_fit(table: Any) -> None:
    row = table("gauge_moments").set_index("gauge_id").loc["02"]
    # 40 systematic years and 1890 to 1970, one of which has the historic peak.
    assert (40, 1, 121) == (row["n_peaks"], row["n_historic"], row["record_years"])
    positions = table("plotting_positions")
    historic = positions[positions["kind"] == "historic"]
    assert [("02", 1901)] == list(zip(historic["gauge_id"], historic["water_year"], strict=True))


def test_the_latest_line_of_the_ledger_sets_the_low_flood_threshold(work: Path, table: Any) -> None:
    low = table("low_flood_tests").set_index("gauge_id")
    assert 600 == pytest.approx(low.loc["04", "threshold"])
    assert low.loc["04", "set_by_analyst"]
    assert "backwater below this" == low.loc["04", "why"]
    ledger = read_table(work.parent / "intake" / "ledger.csv", text=("effect", "action"))
    assert [
        "gauge 04 kept, whatever the screening says",
        "superseded by row 4",
        "low-flood threshold of gauge 04 set to 600 ft3/s for its own fit",
    ] == ledger["effect"].tolist()
    screened = read_table(work.parent / "screen" / "gauges.csv", text=("reasons",)).set_index("gauge_id")
    assert "kept by the ledger" in screened.loc["04", "reasons"], (
        "a threshold does not undo a decision to keep"
    )


def test_low_floods_are_counted_both_ways(table: Any) -> None:
    low = table("low_flood_tests").set_index("gauge_id")
    # The three spoilt peaks, and whatever the inward sweep adds to them.
    assert 3 <= low.loc["06", "count"] <= 20
    assert 2 < low.loc["06", "threshold"]
    assert "05" not in low.index
    assert (low["counts_differ"] == (low["count"] != low["accurate_count"])).all()


def test_later_stages_find_every_digit_and_the_ingredients_of_pseudo_record_length(work: Path) -> None:
    moments = read_table(work / "moments.csv").set_index("gauge_id")
    assert ["01", "02", "04", "06", "07", "08"] == moments.index[moments["fitted"]].tolist()
    covariance = ["cov_mean_mean", "cov_mean_var", "cov_mean_skew", "cov_var_var", "cov_var_skew", "cov_skew_skew"]  # fmt: skip
    assert (
        moments.loc[moments["fitted"], [*covariance, "mean_log10", "pseudo_record_length"]]
        .notna()
        .to_numpy()
        .all()
    )
    # Its three spoilt peaks put the raw skew out of range, and not the gauge out of the skew model.
    assert np.isnan(moments.loc["06", "systematic_skew_mse"])
    assert 10 < moments.loc["06", "pseudo_record_length"] < 40
    # Complete record: the systematic record is all of it.
    assert 40 == pytest.approx(moments.loc["01", "pseudo_record_length"])
    # A historic flood that makes the skew large, and with it the error, takes nothing from the record.
    assert 40 <= moments.loc["02", "pseudo_record_length"] <= 121
    assert 81 == moments.loc["02", "historic_period_years"]
    assert moments.loc["05", ["mean_log10", "pseudo_record_length"]].isna().all()


def test_families_are_judged_per_gauge_and_counted_by_region(table: Any) -> None:
    families, regions = table("family_fits"), table("families_by_region")
    assert 7 * 6 == len(families)
    assert (
        families.loc[families["serves"], "ppcc"] >= families.loc[families["serves"], "ppcc_critical"]
    ).all()
    used = table("gauge_moments").query("used")["gauge_id"]
    counted = families[families["gauge_id"].isin(used)].groupby("family")["serves"].sum()
    for row in regions.itertuples():
        assert counted[row.family] == row.serves, row.family
    lognormal = families[(families["family"] == "lognormal") & (families["gauge_id"] == "01")].iloc[0]
    # The mean of the logarithms of flows in ft3/s.
    assert 6.0 / np.log(10) == pytest.approx(lognormal["parameter_1"], abs=0.15)


def test_page_shows_the_gauges_named_and_says_what_stands_in_the_way(work: Path) -> None:
    contribution = read_contribution(work)
    (section,) = contribution.sections
    assert ("station", "Floods at gauges") == (section.key, section.title)
    files = [figure.file for figure in section.figures]
    assert ["station_skews.png", "curve_02.png", "curve_06.png", "densities.png"] == files
    assert all((work / "figures" / file).stat().st_size > 5000 for file in files)
    assert [("no_curve_to_show", "99")] == [
        (fault.code, fault.value) for fault in contribution.warnings if fault.code == "no_curve_to_show"
    ]
    text = " ".join(section.paragraphs)
    assert "6 of 8 gauges" in text
    assert "2 gauges could not be fitted" in text
    assert "log-Pearson III stays the distribution in use" in text
    assert "nan" not in json.dumps([table.rows for table in section.tables])


def test_order_of_input_rows_and_of_gauges_changes_no_byte(work: Path, tmp_path: Path) -> None:
    folder = tmp_path / "shuffled"
    shutil.copytree(work.parents[1], folder, ignore=shutil.ignore_patterns("work"))
    for name in ("peaks.csv", "gauges.csv"):
        header, *rows = (folder / name).read_text(encoding="utf-8").splitlines()
        (folder / name).write_text("\n".join([header, *reversed(rows)]) + "\n", encoding="utf-8")
    again = run_stages(folder / "study.yaml")
    for path in sorted((work / "tables").iterdir()):
        assert path.read_bytes() == (again / "tables" / path.name).read_bytes(), path.name
    assert (work / "moments.csv").read_bytes() == (again / "moments.csv").read_bytes()


def test_alternatives_can_be_left_out_and_all_curves_drawn(work: Path, tmp_path: Path) -> None:
    folder = tmp_path / "plain"
    shutil.copytree(work.parents[1], folder, ignore=shutil.ignore_patterns("work"))
    text = STUDY.replace(
        'page_figures: ["02", "99", "06"], all_figures: none', "alternatives: false, all_figures: svg"
    )
    (folder / "study.yaml").write_text(text, encoding="utf-8")
    plain = run_stages(folder / "study.yaml")
    names = {table.name for table in read_contribution(plain).tables}
    assert {"family_fits", "families_by_region"}.isdisjoint(names)
    drawn = {path.name for path in (plain / "figures").glob("curve_*.svg")}
    assert {f"curve_{gauge}.svg" for gauge in ("01", "02", "04", "06", "07", "08")} == drawn


@pytest.mark.parametrize(
    ("value", "says"),
    [("", "A flow is expected."), ("-3", "A flow is expected."), ("x", "A flow is expected.")],
)
def test_a_threshold_of_the_ledger_needs_a_flow(value: str, says: str, tmp_path: Path) -> None:
    study = write_study(tmp_path / "study")
    (study.parent / "ledger.csv").write_text(
        "date,by,subject,action,why,gauge_id,value\n2025-01-01,A,gauge,low_flood_threshold,because,04," + value + "\n",
        encoding="utf-8",
    )  # fmt: skip
    problems = wrackline.check(study).problems
    assert [("bad_value", says)] == [(fault.code, fault.problem) for fault in problems]
