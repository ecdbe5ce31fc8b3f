"""The stages that make the generalized skew and weigh it into the fits, on a small study of three regions."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from wrackline.hydrology.at_site import fit_records
from wrackline.hydrology.record_fits import RecordFits
from wrackline.stages import atsite, dependence, intake, screen, skew, weight
from wrackline.stages.running import StudyFiles
from wrackline.study.contribution import read_contribution
from wrackline.study.faults import StudyFaults
from wrackline.study.handover import read_records
from wrackline.study.loading import load_config

N = 36
REGIONS = ("north", "middle", "south")
LEVELS = (0.0, 0.6, 1.2)
STUDY = """\
inputs: {targets: targets.csv}
units: {flow: ft3/s, area: mi2}
attributes: {height: {unit: m}}
at_site: {alternatives: false}
index_flood: {attributes: [area]}
"""


NO_SURFACE = "skew: {surface: false}\n"


def write_study(
    folder: Path, extra: str = "", levels: tuple[float, ...] = LEVELS, shuffle: bool = False
) -> Path:
    """Gauges of 50 independent years whose skews differ by region; the last gauge has 20 years, a target in each region."""
    gauges, peaks = [], []
    for i in range(N):
        rng = np.random.default_rng(100 + i)
        region, place = i % 3, (i // 12 * 0.3, i // 3 % 4 * 0.3)
        years = 20 if i == N - 1 else 50
        g = levels[region] if levels[region] else 1e-6
        shape = 4 / g**2
        standard = np.sign(g) * (rng.gamma(shape, size=years) - shape) / np.sqrt(shape)
        flow = np.round(10 ** (3.0 + 0.2 * standard), 1)
        gauges.append(
            (
                f"{i:03d}",
                f"River {i}",
                48 - 2 * region - place[0],
                -120 + place[1],
                100 + i,
                REGIONS[region],
                rng.uniform(100, 900),
            )
        )
        peaks += [(f"{i:03d}", 1970 + year, value) for year, value in enumerate(flow)]
    folder.mkdir(parents=True)
    names = ["gauge_id", "name", "latitude", "longitude", "area", "region", "height"]
    frame, peak_frame = (
        pd.DataFrame(gauges, columns=names),
        pd.DataFrame(peaks, columns=["gauge_id", "water_year", "flow"]),
    )
    if shuffle:
        frame, peak_frame = frame.sample(frac=1, random_state=1), peak_frame.sample(frac=1, random_state=2)
    frame.to_csv(folder / "gauges.csv", index=False)
    peak_frame.to_csv(folder / "peaks.csv", index=False)
    targets = [(f"T{r}", f"Bridge {r}", 47.5 - 2 * r, -119.5, 120, REGIONS[r], 500.0) for r in range(3)]
    pd.DataFrame(targets, columns=["target_id", *names[1:]]).to_csv(folder / "targets.csv", index=False)
    (folder / "study.yaml").write_text(STUDY + extra, encoding="utf-8")
    return folder / "study.yaml"


def run_stages(study_file: Path) -> StudyFiles:
    study = StudyFiles(load_config(study_file), study_file)
    for stage in (intake, screen, dependence, atsite, skew, weight):
        stage.run(study)
    return study


def run_again(study: StudyFiles, extra: str) -> StudyFiles:
    """Run the two stages once more with other settings of the skew."""
    study.study_file.write_text(STUDY + extra, encoding="utf-8")
    study = StudyFiles(load_config(study.study_file), study.study_file)
    for stage in (skew, weight):
        stage.run(study)
    return study


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> StudyFiles:
    return run_stages(write_study(tmp_path_factory.mktemp("skew") / "study", NO_SURFACE))


@pytest.fixture(scope="module")
def other(tmp_path_factory: pytest.TempPathFactory) -> StudyFiles:
    """A copy to run with other settings, its rows in another order."""
    return run_stages(write_study(tmp_path_factory.mktemp("skew") / "other", NO_SURFACE, shuffle=True))


def tables_of(study: StudyFiles, stage: str) -> dict[str, Any]:
    return {table.name: table.frame for table in read_contribution(study.work(stage)).tables}


def test_regions_that_differ_get_their_own_skew_and_the_page_says_why(study: StudyFiles) -> None:
    contribution = read_contribution(study.work("skew"))
    model = contribution.models["skew_model"]
    assert ("region", "evidence") == (model["model"], model["chosen_by"])
    assert tables_of(study, "skew")["skew_gauges"]["in_model"].sum() == model["n_gauges"]
    assert ["region middle", "region north", "region south"] == model["columns"]
    np.testing.assert_allclose([0.6, 0.0, 1.2], model["coefficients"], atol=0.35)
    assert any("more probable" in text for text in contribution.sections[0].paragraphs)
    for name in ("model_variance", "average_prediction_variance_new", "effective_record_length", "pseudo_anova",
                 "beta_variance_misrepresentation", "model_variance_moments", "model_variance_reml"):  # fmt: skip
        assert model[name] is not None


def test_every_gauge_is_in_the_table_with_its_part_or_the_reason(study: StudyFiles) -> None:
    gauges = tables_of(study, "skew")["skew_gauges"].set_index("gauge_id")
    assert len(gauges) == N
    assert not gauges.loc["035", "in_model"]
    assert gauges.loc["035", "reason"] == "its record is worth 20 years, fewer than 25"
    inside = gauges[gauges["in_model"]]
    needed = [
        "skew",
        "skew_mse",
        "leverage",
        "influence",
        "residual",
        "generalized_skew",
        "generalized_skew_mse",
    ]
    assert inside[needed].notna().all().all()
    assert inside["leverage"].sum() == pytest.approx(3.0)
    np.testing.assert_allclose(inside["skew"] - inside["fitted"], inside["residual"], atol=1e-12)


def test_a_gauge_of_the_model_gets_the_skew_without_itself_and_others_the_models(study: StudyFiles) -> None:
    gauges = tables_of(study, "skew")["skew_gauges"].set_index("gauge_id")
    inside = gauges[gauges["in_model"]]
    # A gauge above the level pulls it up, so without the gauge it is lower, and the other way round.
    assert (np.sign(inside["fitted"] - inside["generalized_skew"]) == np.sign(inside["residual"])).all()
    sites = tables_of(study, "skew")["skew_sites"].set_index("site_id")
    model = read_contribution(study.work("skew")).models["skew_model"]
    level = dict(zip(model["columns"], model["coefficients"], strict=True))
    assert level["region south"] == pytest.approx(sites.loc["T2", "generalized_skew"], rel=1e-9)
    assert level["region south"] == pytest.approx(sites.loc["035", "generalized_skew"], rel=1e-9)
    assert not sites.loc["035", "without_itself"]


def test_weighted_fits_are_those_of_the_fitting_function(study: StudyFiles) -> None:
    moments = tables_of(study, "weight")["gauge_moments"].set_index("gauge_id")
    records = read_records(study.work("intake") / "records.csv", moments.index.tolist())
    fits: RecordFits = fit_records(
        records,
        moments["generalized_skew"].to_numpy(),
        moments["generalized_skew_mse"].to_numpy(),
        aeps=[0.01],
    )
    assert fits.weighted is not None
    np.testing.assert_allclose(fits.weighted.moments.skew, moments["weighted_skew"], rtol=1e-9)
    np.testing.assert_allclose(fits.weighted.skew_mse, moments["weighted_skew_mse"], rtol=1e-9)
    assert (
        moments["weighted_skew_mse"] < moments[["station_skew_mse", "generalized_skew_mse"]].max(axis=1)
    ).all()
    estimates = tables_of(study, "weight")["record_estimates"]
    assert {"station", "weighted_skew"} == set(estimates["source"])
    at = estimates[(estimates["aep"] == 0.01) & (estimates["source"] == "weighted_skew")]
    np.testing.assert_allclose(fits.weighted.flow[:, 0] / 0.3048**3, at["flow"], rtol=1e-9)


def test_errors_shared_between_gauges_are_handed_on(study: StudyFiles) -> None:
    errors = np.load(study.work("skew") / "error_covariance.npy")
    sites = tables_of(study, "skew")["skew_sites"]
    np.testing.assert_allclose(sites["generalized_skew_mse"].iloc[:N], np.diag(errors), rtol=1e-12)
    assert np.linalg.eigvalsh(errors)[0] > 0
    # Gauges 0 and 3 share a region's constant.
    model = read_contribution(study.work("skew")).models["skew_model"]
    north = model["columns"].index("region north")
    assert model["coefficient_covariance"][north][north] == pytest.approx(errors[0, 3], rel=1e-9)


def test_the_map_holds_the_levels_of_the_regions(study: StudyFiles) -> None:
    import rasterio

    with rasterio.open(study.work("skew") / "skew.tif") as tif:
        skew_band, mse_band = tif.read(masked=True)
    model = read_contribution(study.work("skew")).models["skew_model"]
    assert set(np.round(model["coefficients"], 4)) == set(np.round(skew_band.compressed().astype(float), 4))
    assert skew_band.mask.any()
    assert (mse_band.compressed() > 0).all()


def test_order_of_rows_changes_no_byte(study: StudyFiles, other: StudyFiles) -> None:
    for stage, names in {
        "skew": (
            "skew.tif",
            "sites.csv",
            "model.json",
            "skew_cells.csv",
            "error_covariance.npy",
            "contribution.json",
        ),
        "weight": (
            "moments.csv",
            "contribution.json",
            "tables/gauge_moments.csv",
            "tables/record_estimates.csv",
        ),
    }.items():
        for name in names:
            assert (study.work(stage) / name).read_bytes() == (other.work(stage) / name).read_bytes(), name


def test_a_fixed_model_is_kept_and_the_evidence_is_told(other: StudyFiles) -> None:
    study = run_again(other, "skew: {model: constant, surface: false, why: neighbouring agencies use one}\n")
    contribution = read_contribution(study.work("skew"))
    model = contribution.models["skew_model"]
    assert ("constant", "configuration", "region") == (
        model["model"],
        model["chosen_by"],
        model["evidence_would_choose"],
    )
    assert "skew_model_fixed" in {fault.code for fault in contribution.warnings}
    assert any("neighbouring agencies use one" in text for text in contribution.sections[0].paragraphs)


def test_a_surface_and_a_regression_can_be_mapped(other: StudyFiles) -> None:
    for name in ("surface", "height"):
        study = run_again(other, f"skew: {{model: {name}, why: to see}}\n")
        sites = tables_of(study, "skew")["skew_sites"]
        assert sites["generalized_skew"].notna().all()
        assert (sites["generalized_skew_mse"] > 0).all()
        assert (pd.read_csv(study.work("skew") / "skew_contours.csv").empty) == (name == "height")
        assert np.linalg.eigvalsh(np.load(study.work("skew") / "error_covariance.npy"))[0] > -1e-12


def test_a_given_skew_is_used_as_it_is(other: StudyFiles) -> None:
    study = run_again(
        other, "skew: {source: constant, given_skew: -0.1, given_mse: 0.302, why: national value}\n"
    )
    moments = tables_of(study, "weight")["gauge_moments"]
    assert {(-0.1, 0.302)} == set(
        zip(moments["generalized_skew"], moments["generalized_skew_mse"], strict=True)
    )
    model = read_contribution(study.work("skew")).models["skew_model"]
    assert ("constant", -0.1, 0.302) == (model["source"], model["skew"], model["mse"])


def test_a_given_map_is_read_at_the_basins(study: StudyFiles, other: StudyFiles) -> None:
    (other.folder / "old.tif").write_bytes((study.work("skew") / "skew.tif").read_bytes())
    again = run_again(other, "skew: {source: map, given_map: old.tif, why: the last edition}\n")
    expected = tables_of(study, "skew")["skew_sites"].set_index("site_id")
    found = tables_of(again, "skew")["skew_sites"].set_index("site_id")
    for site in ("T0", "T1", "T2"):
        assert expected.loc[site, "generalized_skew"] == pytest.approx(
            found.loc[site, "generalized_skew"], rel=1e-6
        )
    (other.folder / "old.tif").write_text("not a map", encoding="utf-8")
    with pytest.raises(StudyFaults, match="problem"):
        run_again(other, "skew: {source: map, given_map: old.tif, why: the last edition}\n")


def test_too_few_gauges_leave_the_station_fits_and_say_so(other: StudyFiles) -> None:
    study = run_again(other, "skew: {minimum_record_years: 60}\n")
    assert "too_few_gauges_for_skew" in {
        fault.code for fault in read_contribution(study.work("skew")).warnings
    }
    moments = tables_of(study, "weight")["gauge_moments"]
    assert moments["weighted_skew"].isna().all()
    assert moments["station_skew"].notna().all()
    assert {"station"} == set(tables_of(study, "weight")["record_estimates"]["source"])


def test_a_model_that_cannot_be_fixed_is_refused_with_the_reason(other: StudyFiles) -> None:
    with pytest.raises(StudyFaults) as told:
        run_again(other, "skew: {model: moon, why: because}\n")
    assert "no such model was tried" in str(told.value.problems[0])


def test_what_is_published_has_no_gap_in_json(study: StudyFiles) -> None:
    text = (study.work("skew") / "tables" / "skew_model.json").read_text(encoding="utf-8")
    assert json.loads(text)["source"] == "fitted"
    assert "NaN" not in text
