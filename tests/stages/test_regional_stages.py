"""Regression, validation and estimates of the example study, and its saved models applied to new sites."""

import csv
import importlib
import json
import shutil

import numpy as np
import pandas as pd
import pytest
from typer.testing import CliRunner

import wrackline
from wrackline.cli import app
from wrackline.hydrology.attributes import TRANSFORMS
from wrackline.report.rounding import THIN_SPACE
from wrackline.stages.running import StudyFiles
from wrackline.study.contribution import write_contribution
from wrackline.study.faults import FaultLog, StudyFaults
from wrackline.study.loading import UnreadableStudy, load_config
from wrackline.study.published import StageOutput
from wrackline.study.saved_models import adopted_routes
from wrackline.study.tables import read_table

STAGES = (
    "intake",
    "screen",
    "dependence",
    "atsite",
    "skew",
    "weight",
    "pool",
    "regress",
    "validate",
    "estimate",
)
CONTRACT = [
    "gauge_id",
    "aep",
    "route",
    "observed",
    "observed_se_log10",
    "predicted",
    "predicted_se_log10",
    "log10_error",
    "covered",
]


def run_stages(study_file, stages=STAGES):
    study = StudyFiles(load_config(study_file), study_file)
    for stage in stages:
        importlib.import_module(f"wrackline.stages.{stage}").run(study)
    return study


@pytest.fixture(scope="module")
def study(tmp_path_factory, copy_example, quick_parts):
    file = copy_example(
        tmp_path_factory.mktemp("regional") / "study",
        **quick_parts,
        skew={"surface": False},
    )
    return run_stages(file)


@pytest.fixture(scope="module")
def results(study):
    """The saved models where a finished study has them."""
    folder = study.folder / "results"
    (folder / "tables").mkdir(parents=True)
    shutil.copy(study.work("estimate") / "tables" / "saved_models.json", folder / "tables")
    return folder


def table(study, stage, name):
    return read_table(study.work(stage) / "tables" / f"{name}.csv", text=("route", "source", "warnings"))


def section(study, stage, key):
    document = json.loads((study.work(stage) / "contribution.json").read_text(encoding="utf-8"))
    return next(one for one in document["sections"] if one["key"] == key)


def number(text):
    return float(text.replace(THIN_SPACE, "").replace("\u2212", "-"))


def test_cross_validation_has_the_promised_columns_and_adds_up(study):
    found = table(study, "validate", "cross_validation")
    assert CONTRACT == list(found.columns)
    assert {"growth_curve", "quantile_regression", "routes_combined"} == set(found["route"])
    np.testing.assert_allclose(
        found["log10_error"], np.log10(found["predicted"] / found["observed"]), atol=1e-12
    )
    routes = json.loads((study.work("validate") / "routes.json").read_text(encoding="utf-8"))
    weight = routes["combination"]["weight_quantile_regression"]
    wide = found.pivot_table(index=["gauge_id", "aep"], columns="route", values="predicted")
    expected = (1 - weight) * np.log10(wide["growth_curve"]) + weight * np.log10(wide["quantile_regression"])
    np.testing.assert_allclose(np.log10(wide["routes_combined"]), expected, rtol=1e-12)


def test_left_out_gauge_does_not_inform_its_own_prediction(study, tmp_path):
    """Fit the index equation again without one gauge: the same prediction as the closed form."""
    from wrackline.hydrology.index_flood import index_sampling_covariance, sample_index_floods
    from wrackline.stages.gauge_floods import read_used_gauges
    from wrackline.stages.regress import plan_design, relative_sd_of, site_attributes
    from wrackline.stats.gls import fit_gls

    gauges = read_used_gauges(study)
    growth = json.loads((study.work("pool") / "growth.json").read_text(encoding="utf-8"))
    index = sample_index_floods(gauges.records, relative_sd_of(growth, gauges.gauge_ids))
    covariance = index_sampling_covariance(
        index.log10_variance, gauges.common_years, index.n, gauges.correlation
    )
    plan = plan_design(study.config, study.config.index_flood.attributes, [], "one")
    design = plan.design(site_attributes(gauges.sites, plan), [""] * len(index.n))
    saved = json.loads((study.work("regress") / "tables" / "equations.json").read_text(encoding="utf-8"))
    left_out = read_table(study.work("regress") / "left_out.csv")
    of_index = left_out[left_out["aep"].isna()].set_index("gauge_id")["predicted"]
    for i in (0, 50, 100):
        kept = np.arange(len(index.n)) != i
        fit = fit_gls(
            np.log10(index.flow[kept]),
            design[kept],
            covariance[np.ix_(kept, kept)],
            model_variance=saved["index_flood"]["model_variance"][0],
        )
        assert fit.predict(design[i : i + 1])[0][0] == pytest.approx(of_index[gauges.gauge_ids[i]], rel=1e-9)


def test_one_route_a_target_and_one_source_a_gauge_are_adopted(study):
    targets = table(study, "estimate", "target_estimates")
    adopted = targets[targets["adopted"]]
    assert not adopted[["target_id", "route"]].drop_duplicates()["target_id"].duplicated().any()
    assert set(targets["target_id"]) == set(adopted["target_id"])
    assert not adopted.duplicated(["target_id", "aep"]).any()
    gauges = table(study, "estimate", "gauge_estimates")
    assert {"station", "weighted_skew", "regression", "record_and_regression"} == set(gauges["source"])
    adopted = gauges[gauges["adopted"]]
    assert not adopted[["gauge_id", "source"]].drop_duplicates()["gauge_id"].duplicated().any()
    assert not adopted.duplicated(["gauge_id", "aep"]).any()


@pytest.mark.parametrize(
    ("name", "site", "kind"),
    [("target_estimates", "target_id", "route"), ("gauge_estimates", "gauge_id", "source")],
)
def test_floods_rise_as_they_become_rarer_and_lie_in_their_intervals(study, name, site, kind):
    found = table(study, "estimate", name).sort_values([site, kind, "aep"], ascending=[True, True, False])
    steps = found.groupby([site, kind])["flow"].diff().dropna()
    assert (steps >= 0).all()
    assert (found["lower"] < found["flow"]).all()
    assert (found["flow"] < found["upper"]).all()


def test_record_and_region_together_are_surer_than_each(study):
    gauges = table(study, "estimate", "gauge_estimates")
    se = gauges.pivot_table(index=["gauge_id", "aep"], columns="source", values="se_log10").dropna()
    assert (se["record_and_regression"] < se["weighted_skew"]).all()
    assert (se["record_and_regression"] < se["regression"]).all()


def test_best_subsets_are_ranked_and_the_report_prints_the_line_that_pins_them(study):
    subsets = table(study, "regress", "attribute_subsets")
    assert len(subsets) in (20, 21)
    assert subsets["prediction_variance"].iloc[:20].is_monotonic_increasing
    assert subsets["used"].sum() == 1
    text = " ".join(section(study, "regress", "index_flood")["paragraphs"])
    used = subsets.loc[subsets["used"], "attributes"].iloc[0].replace(" + ", ", ")
    assert f"regression: {{attributes: [{used}]}}" in text


def test_saved_models_give_the_studys_own_targets_to_the_last_digit(study, results):
    run = CliRunner().invoke(app, ["estimate", str(results), str(study.folder / "targets.csv"), "--json"])
    assert 0 == run.exit_code, run.output
    found = pd.DataFrame(json.loads(run.stdout)["estimates"])
    expected = table(study, "estimate", "target_estimates")
    for column in ("target_id", "route", "warnings"):
        assert expected[column].tolist() == found[column].tolist()
    for column in ("aep", "flow", "lower", "upper", "se_log10"):
        np.testing.assert_array_equal(expected[column].to_numpy(), found[column].to_numpy(dtype=float))
    assert expected["adopted"].tolist() == found["adopted"].tolist()


def test_printed_estimates_name_route_unit_and_interval(study, results):
    run = CliRunner().invoke(app, ["estimate", str(results), str(study.folder / "targets.csv")])
    assert 0 == run.exit_code
    assert "T01: " in run.stdout
    assert "m³/s" in run.stdout
    assert "90% intervals" in run.stdout


def new_sites(path, **changes):
    row = {
        "target_id": "N1", "name": "New bridge", "latitude": "40.1", "longitude": "-147.5", "area": "120",
        "region": "west", "precipitation": "1400", "elevation": "500", "slope": "20", "forest": "40", "baseflow_index": "0.4",
    }  # fmt: skip
    row = {key: value for key, value in (row | changes).items() if value is not None}
    with path.open("w", encoding="utf-8", newline="") as file:
        writer = csv.DictWriter(file, list(row))
        writer.writeheader()
        writer.writerow(row)
    return path


def test_a_new_site_is_estimated_from_python(results, tmp_path):
    found = wrackline.estimate(results, new_sites(tmp_path / "new.csv"))
    assert len(found.adopted) == 8
    assert found.adopted["flow"].is_monotonic_increasing
    far = wrackline.estimate(results, new_sites(tmp_path / "far.csv", area="90000"))
    assert "area is above the gauges' range" in far.adopted["warnings"].iloc[0]


def test_where_pools_are_no_regions_a_new_site_takes_the_curve_of_the_gauge_most_like_it(results, tmp_path):
    models = json.loads((results / "tables" / "saved_models.json").read_text(encoding="utf-8"))
    models["pooling_method"] = "influence"
    (tmp_path / "tables").mkdir()
    (tmp_path / "tables" / "saved_models.json").write_text(json.dumps(models), encoding="utf-8")
    found = wrackline.estimate(tmp_path, new_sites(tmp_path / "new.csv", region="anywhere"))
    gauge = found.table["warnings"].iloc[0].split("that of gauge ")[1].split(",")[0]
    distance = {
        g: np.hypot(*(np.array(one["place"]) - np.log10([120, 1400]))) for g, one in models["gauges"].items()
    }
    assert distance[gauge] < np.median(list(distance.values()))


@pytest.mark.parametrize(
    ("changes", "code", "column"),
    [
        ({"area": "-5"}, "not_positive", "area"),
        ({"area": "twelve"}, "not_a_number", "area"),
        ({"region": "atlantis"}, "unknown_region", "region"),
        ({"region": ""}, "target_without_region", "region"),
        ({"precipitation": ""}, "missing_attribute", "precipitation"),
        ({"precipitation": None}, "missing_column", "precipitation"),
        ({"target_id": "0410025"}, "target_is_gauge", "target_id"),
    ],
)
def test_bad_sites_are_told_with_row_and_column(results, tmp_path, changes, code, column):
    with pytest.raises(StudyFaults) as caught:
        wrackline.estimate(results, new_sites(tmp_path / "new.csv", **changes))
    found = {(fault.code, fault.column) for fault in caught.value.problems}
    assert (code, column) in found


def test_folders_without_models_and_missing_tables_end_with_status_2(results, tmp_path):
    sites = new_sites(tmp_path / "new.csv")
    for arguments in ([str(tmp_path), str(sites)], [str(results), str(tmp_path / "no.csv")]):
        with pytest.raises(UnreadableStudy):
            wrackline.estimate(*arguments)


def test_printed_numbers_alone_give_the_tables_within_one_percent(study):
    """Compute every gauge's floods from the appendix's printed attributes and rounded coefficients."""
    tables = section(study, "estimate", "appendices")["tables"]
    attributes = next(t for t in tables if t["caption"].startswith("Attributes of the gauges"))
    equations = next(t for t in tables if t["caption"].startswith("Equations of the floods"))
    ranges = next(t for t in tables if "Ranges" in t["caption"] and "floods" in t["caption"])
    names = [head.split(", ")[0] for head in attributes["head"]]
    transforms = {row[0]: row[1] for row in ranges["rows"]}
    expected = table(study, "regress", "regression_gauges").set_index(["gauge_id", "aep"])["regression"]
    coefficients = [[float(cell) for cell in row[1:-1]] for row in equations["rows"]]
    aeps = [number(row[0].rstrip("%")) / 100 for row in equations["rows"]]
    compared = 0
    for row in attributes["rows"]:
        values = dict(zip(names[1:], (number(cell) for cell in row[1:]), strict=True))
        columns = [1.0, *(float(TRANSFORMS[t](np.array(values[name]))) for name, t in transforms.items())]
        for aep, b in zip(aeps, coefficients, strict=True):
            if (row[0], round(aep, 6)) in expected.index:
                computed = 10 ** float(np.dot(b, columns))
                assert computed == pytest.approx(expected[row[0], round(aep, 6)], rel=0.01)
                compared += 1
    assert compared == len(expected)


def test_worked_example_gives_its_own_numbers(study):
    text = section(study, "estimate", "appendices")["paragraphs"][-1]
    assert "Worked example" in text
    sums, total = text.split("log10 Q = ")[1].split(", so Q")[0].rsplit(" = ", 1)
    parts = [part.strip("() ").split(" x ") for part in sums.split(" + ")]
    assert float(total) == pytest.approx(sum(number(a) * number(b) for a, b in parts), abs=1e-3)


def test_analyst_adopts_a_route_in_configuration_or_ledger(study):
    config = study.config.model_copy(
        update={
            "regression": study.config.regression.model_copy(
                update={
                    "adopt": (
                        type(study.config.regression)
                        .model_validate(
                            {"adopt": [{"route": "growth_curve", "target_id": "T01", "why": "same dam"}]}
                        )
                        .adopt[0],
                    )
                }
            )
        }
    )
    ledger = pd.DataFrame(
        [
            ("2025-01-02", "estimate", "adopt", "T02 quantile_regression", "steep basin"),
            ("2025-01-03", "estimate", "adopt", "T01 routes_combined", "second thoughts"),
            ("2025-01-04", "estimate", "adopt", "by guess", "no route"),
        ],
        columns=["date", "subject", "action", "value", "why"],
    )
    faults = FaultLog()
    found = adopted_routes(config, ledger, {"T01", "T02"}, faults)
    assert [("T01", "routes_combined"), ("T02", "quantile_regression")] == [
        (pin["target_id"], pin["route"]) for pin in found
    ]
    assert ["ledger_line_not_applied"] == [fault.code for fault in faults.warnings]


def test_adopted_route_of_the_analyst_carries_its_reason(study):
    from wrackline.study.handover import read_sites
    from wrackline.study.target_estimates import estimate_targets

    models = json.loads((study.work("estimate") / "tables" / "saved_models.json").read_text(encoding="utf-8"))
    models["adopt"] = [{"target_id": "T02", "route": "quantile_regression", "why": "steep basin"}]
    found = estimate_targets(study.config, models, read_sites(study.work("intake") / "targets.csv"))
    own = found[(found["target_id"] == "T02") & found["adopted"]]
    assert {"quantile_regression"} == set(own["route"])
    assert own["warnings"].str.contains("adopted by the analyst: steep basin").all()


def test_contributions_can_be_published(study):
    for stage in ("regress", "validate", "estimate"):
        from wrackline.study.contribution import read_contribution

        output = StageOutput(study.work(stage), read_contribution(study.work(stage)))
        assert all(path.is_file() for path in output.published_figures().values())
        write_contribution(study.folder / "again" / stage, output.contribution)
