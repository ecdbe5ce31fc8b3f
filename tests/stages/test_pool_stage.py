"""The stage `pool` on a small study laid down as the stages before it leave it."""

import json

import numpy as np
import pandas as pd
import pytest

from wrackline.hydrology.records import exact_records
from wrackline.report.style import without_figures
from wrackline.stages import pool
from wrackline.stages.running import StudyFiles
from wrackline.stats.distributions import gev
from wrackline.study.config import StudyConfig
from wrackline.study.contribution import read_contribution
from wrackline.study.faults import StudyFaults
from wrackline.study.handover import write_records
from wrackline.study.tables import read_table, write_table

REGION = {f"{i:02}": "north" if i < 8 else "south" for i in range(16)}
HOMELESS, SHORT, MOVED, UNUSED = "20", "21", "07", "22"
REGION |= {HOMELESS: "", SHORT: "south", UNUSED: "south"}
MOVE = {"gauge_id": MOVED, "to": "south", "why": "drains to the other side of the divide"}
PIN = {"pool": "south", "distribution": "GPA", "why": "as in the last study"}


TARGETS = {"T1": "north", "T2": "south", "T3": "nowhere"}
LEDGER_COLUMNS = [
    "date",
    "by",
    "subject",
    "action",
    "why",
    "gauge_id",
    "water_year",
    "pool",
    "value",
    "evidence",
    "effect",
]


def lay_down(root, shuffle=None, regions=REGION, ledger=(), without=(), **pooling):
    ids = sorted(regions)
    rng = np.random.default_rng(11)
    n = {gauge: 6 if gauge == SHORT else int(rng.integers(25, 50)) for gauge in ids}
    law = gev.fit(1.0, 0.3, 0.2)
    flow = {
        gauge: 50 * (1 + i) * np.maximum(gev.quantile(law, rng.random(n[gauge])), 0.02)
        for i, gauge in enumerate(ids)
    }
    offsets = np.concatenate([[0], np.cumsum([n[gauge] for gauge in ids])])
    years = np.concatenate([np.arange(2020 - n[gauge], 2020) for gauge in ids])
    records = exact_records(ids, offsets, years, np.concatenate([flow[gauge] for gauge in ids]))
    (root / "work" / "dependence").mkdir(parents=True)
    write_records(root / "work" / "screen" / "records.csv", records)
    sites = pd.DataFrame(
        {
            "gauge_id": ids,
            "name": ids,
            "centroid_latitude": 45 + 0.2 * np.arange(len(ids)),
            "centroid_longitude": 7.0,
            "region": [regions[gauge] for gauge in ids],
            "area_km2": 100.0 * (1 + np.arange(len(ids)) % 7),
        }
    )
    targets = pd.DataFrame(
        {
            "target_id": list(TARGETS),
            "name": list(TARGETS),
            "centroid_latitude": [45.5, 47.7, 49.5],
            "centroid_longitude": 7.0,
            "region": list(TARGETS.values()),
            "area_km2": 250.0,
        }
    )
    unused = {UNUSED, *without}
    screened = pd.DataFrame({"gauge_id": ids, "used": [gauge not in unused for gauge in ids], "reasons": ""})
    if shuffle is not None:
        order = np.random.default_rng(shuffle).permutation(len(ids))
        sites, screened = sites.iloc[order], screened.iloc[order[::-1]]
    write_table(root / "work" / "intake" / "gauges.csv", sites)
    write_table(root / "work" / "intake" / "targets.csv", targets)
    write_table(root / "work" / "intake" / "ledger.csv", pd.DataFrame(list(ledger), columns=LEDGER_COLUMNS))
    write_table(root / "work" / "screen" / "gauges.csv", screened)
    model = {"a": 0.0, "b": 0.01, "form": "exponential", "minimum_common_years": 20, "pairs": 40}
    (root / "work" / "dependence" / "model.json").write_text(json.dumps(model), encoding="utf-8")
    quick = {"simulations": 200, "close_call_simulations": 200, "growth_simulations": 200}
    config = StudyConfig.model_validate({"pooling": quick | pooling, "units": {"flow": "ft3/s"}})
    return StudyFiles(config, root / "study.yaml")


def run_for_numbers(study):
    with without_figures():
        return pool.run(study)


@pytest.fixture(scope="module")
def study(tmp_path_factory):
    study = lay_down(tmp_path_factory.mktemp("pool"), moves=[MOVE], distributions=[PIN])
    assert pool.run(study) == "16 gauges in 2 pools"
    return study


@pytest.fixture(scope="module")
def contribution(study):
    return read_contribution(study.work("pool"))


def table(contribution, name):
    return next(t.frame for t in contribution.tables if t.name == name)


def test_tables_have_the_promised_columns(contribution):
    promised = {
        "gauge_lmoments": ["gauge_id", "n", "mean", "lcv", "lskew", "lkurtosis"],
        "pools": ["pool", "gauge_id", "weight", "discordancy", "critical", "discordant"],
        "pool_tests": [
            "pool", "n_gauges", "station_years", "h1", "h2", "h3", "h1_correlated", "simulations", "verdict",
        ],
        "pool_distributions": ["pool", "distribution", "z", "accepted", "chosen"],
        "growth_curves": ["pool", "distribution", "aep", "growth_factor", "lower", "upper"],
    }  # fmt: skip
    for name, columns in promised.items():
        assert columns == list(table(contribution, name).columns[: len(columns)])


def test_averages_follow_from_the_published_weights_and_l_moments(contribution):
    pooled = table(contribution, "gauge_lmoments").set_index("gauge_id")["pooled_lcv"]
    members = table(contribution, "pools")
    for test in table(contribution, "pool_tests").itertuples():
        own = members[(members["pool"] == test.pool) & (members["weight"] > 0)]
        assert test.lcv == pytest.approx((own["weight"] * own["gauge_id"].map(pooled)).sum(), rel=1e-12)


def test_moves_and_short_records_are_in_the_table_with_their_reasons(contribution):
    pools = table(contribution, "pools").set_index("gauge_id")
    assert "south" == pools.loc[MOVED, "pool"]
    assert "divide" in pools.loc[MOVED, "remark"]
    assert "6 exactly known systematic peaks, fewer than 10" in pools.loc[SHORT, "remark"]
    assert 0.0 == pools.loc[SHORT, "weight"]
    assert not {HOMELESS, UNUSED} & set(pools.index)
    assert [1.0, 1.0] == pytest.approx(pools.groupby("pool")["weight"].sum().tolist())


def test_gauges_without_a_pool_are_warned_of(contribution):
    assert [HOMELESS] == [
        fault.problem.rsplit(" ", 1)[1] for fault in contribution.warnings if fault.code == "gauge_in_no_pool"
    ]


def test_a_fixed_law_is_chosen_and_the_evidence_is_told(contribution):
    laws = table(contribution, "pool_distributions")
    chosen = laws[laws["chosen"]].set_index("pool")["distribution"]
    assert "GPA" == chosen["south"]
    growth = next(s for s in contribution.sections if s.key == "growth")
    assert any(
        "fixed by the analyst: as in the last study. The tests would choose" in p for p in growth.paragraphs
    )


def test_means_are_in_the_declared_unit(study, contribution):
    records = read_table(study.work("screen") / "records.csv")
    expected = records.loc[records["gauge_id"] == "03", "flow_low"].mean() / 0.3048**3
    means = table(contribution, "gauge_lmoments").set_index("gauge_id")["mean"]
    assert expected == pytest.approx(means["03"])


def test_growth_file_serves_later_stages(study, contribution):
    growth = json.loads((study.work("pool") / "growth.json").read_text(encoding="utf-8"))
    north = growth["pools"]["north"]
    assert sorted({*study.config.aeps.gauges, *study.config.aeps.targets}, reverse=True) == north["aeps"]
    assert 1.0 == pytest.approx(north["growth_factor"][north["aeps"].index(0.5)])
    assert 0.0 == growth["pools"]["south"]["gauges"][SHORT]
    assert 7 == north["n_gauges"] == len(north["gauges"])
    assert north["index_relative_sd"] == pytest.approx(1 / (2 * north["density_at_median"]))
    published = table(contribution, "growth_curves")
    assert north["upper"] == published.loc[published["pool"] == "north", "upper"].tolist()


def test_sections_quote_the_numbers_of_the_tables(contribution):
    tests = table(contribution, "pool_tests").set_index("pool")
    words = next(s for s in contribution.sections if s.key == "homogeneity").paragraphs[0]
    assert f"{tests.loc['north', 'h1']:.2f}".replace("-", "\N{MINUS SIGN}") in words
    assert tests.loc["north", "verdict"] in words


def test_figures_of_the_sections_exist(study, contribution):
    for section in contribution.sections:
        assert section.figures
        for figure in section.figures:
            assert (study.work("pool") / "figures" / figure.file).stat().st_size > 5000


def test_order_of_input_rows_changes_no_byte(study, tmp_path):
    again = lay_down(tmp_path, shuffle=3, moves=[MOVE], distributions=[PIN])
    pool.run(again)
    files = sorted(p.relative_to(study.folder) for p in study.work("pool").rglob("*") if p.is_file())
    assert len(files) >= 10
    for file in files:
        assert (study.folder / file).read_bytes() == (tmp_path / file).read_bytes(), file


def test_a_pools_numbers_do_not_depend_on_the_other_pools(study, tmp_path):
    alone = lay_down(
        tmp_path,
        regions={g: r if r != "south" else "" for g, r in REGION.items()},
        moves=[MOVE | {"to": ""}],
        compare=[],
    )
    run_for_numbers(alone)
    one, other = (
        json.loads((s.work("pool") / "growth.json").read_text(encoding="utf-8")) for s in (study, alone)
    )
    assert one["pools"]["north"] == other["pools"]["north"]


def test_all_gauges_together_form_one_pool(tmp_path):
    study = lay_down(tmp_path)
    study = StudyFiles(
        study.config.model_copy(
            update={"pooling": study.config.pooling.model_copy(update={"regions": "one", "compare": ()})}
        ),
        study.study_file,
    )
    assert pool.run(study) == "17 gauges in 1 pool"


def test_no_region_anywhere_is_a_problem_with_a_mend(tmp_path):
    study = lay_down(tmp_path, regions=dict.fromkeys(REGION, ""))
    with pytest.raises(StudyFaults) as faults:
        run_for_numbers(study)
    assert ["no_pool"] == [fault.code for fault in faults.value.problems]
    assert "set pooling.regions to one" in faults.value.problems[0].mend


QUICK_COMPARISON = {"compare": [], "sheets": ["T1"]}


def growth_of(study):
    return json.loads((study.work("pool") / "growth.json").read_text(encoding="utf-8"))


def test_targets_and_gauges_are_told_their_pools(study):
    home = growth_of(study)["home"]
    assert {"T1": "north", "T2": "south", "T3": "", MOVED: "south", HOMELESS: ""}.items() <= home.items()


def test_a_pool_put_together_by_hand_equals_the_region_of_the_same_gauges_to_the_last_digit(study, tmp_path):
    south = [g for g, region in REGION.items() if region == "south" or g == MOVED]
    by_hand = {"pool": "south", "gauges": [g for g in south if g != UNUSED], "why": "as the region"}
    regions = {g: "elsewhere" if g in south else r for g, r in REGION.items()}
    hand = lay_down(tmp_path, regions=regions, pools=[by_hand], distributions=[PIN], **QUICK_COMPARISON)
    run_for_numbers(hand)
    assert growth_of(study)["pools"]["south"] == growth_of(hand)["pools"]["south"]
    assert growth_of(study)["pools"]["north"] == growth_of(hand)["pools"]["north"]


def test_a_region_of_influence_of_all_gauges_has_the_members_of_the_one_region(tmp_path):
    study = lay_down(tmp_path, method="influence", influence_years=9999, **QUICK_COMPARISON)
    run_for_numbers(study)
    members = sorted(g for g in REGION if g not in (UNUSED, SHORT))
    assert members == sorted(growth_of(study)["pools"]["T1"]["gauges"])


def test_a_line_of_the_ledger_moves_a_gauge_like_the_configuration_does_and_its_effect_is_told(
    study, tmp_path
):
    line = {
        "date": "2025-01-02",
        "by": "A. N. Analyst",
        "subject": "pool",
        "action": "move",
        "gauge_id": MOVED,
        "value": "south",
    }
    line |= {"why": MOVE["why"], "effect": "gauge moved"}
    superseded = line | {"gauge_id": "03", "effect": "superseded by row 4"}
    moved = lay_down(tmp_path, ledger=[line, superseded], distributions=[PIN], **QUICK_COMPARISON)
    run_for_numbers(moved)
    assert growth_of(study)["pools"] == growth_of(moved)["pools"]
    words = " ".join(read_contribution(moved.work("pool")).sections[0].paragraphs)
    assert "drains to the other side of the divide (ledger, 2025-01-02)" in words
    assert "The moves took pool north from 8 gauges" in words


def test_leaving_a_gauge_out_of_its_own_region_of_influence_equals_a_study_without_it(tmp_path):
    options = {
        "method": "influence",
        "own_record": "leave_out",
        "influence_years": 200,
        "influence_gauges": 4,
    }
    whole = lay_down(tmp_path / "whole", **options, **QUICK_COMPARISON)
    run_for_numbers(whole)
    fewer = lay_down(tmp_path / "fewer", without=["05"], **options, **QUICK_COMPARISON)
    run_for_numbers(fewer)
    left_out = growth_of(whole)["pools"]["05"]["gauges"]
    assert "05" not in left_out
    assert all("05" not in p["gauges"] for name, p in growth_of(fewer)["pools"].items())
    assert "05" in growth_of(whole)["pools"]["04"]["gauges"]


def test_clusters_chosen_with_h_are_labelled_and_their_trials_told(tmp_path):
    study = lay_down(tmp_path, method="clusters", cluster_gauges=8, cluster_years=100, **QUICK_COMPARISON)
    run_for_numbers(study)
    contribution = read_contribution(study.work("pool"))
    tests, trials = table(contribution, "pool_tests"), table(contribution, "pool_cluster_trials")
    assert tests["after_selection"].all()
    assert tests["verdict"].str.contains("after selection").all()
    assert len(tests) == trials.loc[trials["chosen"], "n_clusters"].item()
    assert set(growth_of(study)["home"]) >= set(TARGETS)


def test_ways_of_pooling_are_compared_at_the_same_gauges(study, contribution):
    found = table(contribution, "pool_validation")
    assert {"one", "regions", "clusters", "influence"} == set(found["method"])
    assert 1 == found["n_gauges"].nunique()
    assert (found["rmse"] >= found["net_error"]).all()
    assert ["regions"] == found.loc[found["used"], "method"].unique().tolist()
    assert found["covered"].between(0, 1).all()


def test_nothing_is_suggested_silently(study, contribution):
    suggested = table(contribution, "pool_suggestions")
    weights = table(contribution, "pools").set_index(["pool", "gauge_id"])["weight"]
    assert all(weights[p, g] > 0 for p, g in suggested[["pool", "gauge_id"]].itertuples(index=False))
