"""The stages on a small study laid down as intake leaves it: 14 gauges with every way in and out."""

import json

import numpy as np
import pandas as pd
import pytest

from wrackline.hydrology.dependence import DistanceModel
from wrackline.hydrology.distances import EARTH_RADIUS_KM
from wrackline.hydrology.records import exact_records
from wrackline.stages import dependence, screen
from wrackline.stages.running import StudyFiles
from wrackline.study.config import StudyConfig
from wrackline.study.contribution import read_contribution
from wrackline.study.faults import StudyFaults
from wrackline.study.handover import read_records, read_sites, write_records
from wrackline.study.tables import read_table, write_table

KM = np.degrees(1 / EARTH_RADIUS_KM)
IDS = [f"{i:03d}" for i in range(14)]
NESTED = {"001": "000", "004": "003", "006": "005"}
SHORT, REGULATED, DATED, LEDGER_OUT, LEDGER_KEEP, HOPELESS = "007", "008", "009", "010", "011", "012"


def square(lat, lon, km):
    d = km * KM / 2
    return f"POLYGON (({lon - d} {lat - d}, {lon + d} {lat - d}, {lon + d} {lat + d}, {lon - d} {lat + d}, {lon - d} {lat - d}))"


def lay_down(folder, ledger_rows=None):
    g = len(IDS)
    north = np.arange(g) * 40.0
    for one, other in NESTED.items():
        north[IDS.index(one)] = north[IDS.index(other)] + 2.0
    lat = np.round(KM * north, 9)
    years = {i: np.arange(1960, 2010) for i in IDS}
    years.update({i: np.arange(1970, 2010) for i in NESTED})
    years[SHORT] = np.arange(2000, 2008)
    years[LEDGER_KEEP] = np.arange(2000, 2008)
    years[HOPELESS] = np.arange(2000, 2003)
    rng = np.random.default_rng(17)
    shared = rng.normal(size=50)
    flow = {
        i: 10 ** (1.5 + 0.2 * (0.8 * shared[y - 1960] + 0.6 * rng.normal(size=len(y))))
        for i, y in years.items()
    }
    offsets = np.concatenate([[0], np.cumsum([len(years[i]) for i in IDS])])
    records = exact_records(
        IDS, offsets, np.concatenate(list(years.values())), np.concatenate(list(flow.values()))
    )
    write_records(folder / "records.csv", records)
    write_table(
        folder / "gauges.csv",
        pd.DataFrame(
            {
                "gauge_id": IDS,
                "name": IDS,
                "latitude": lat,
                "longitude": 8.0,
                "area_km2": 100.0,
                "centroid_latitude": lat,
                "centroid_longitude": 8.0,
                "centroid_source": "given",
                "region": "",
                "regulated": [i in (REGULATED, DATED) for i in IDS],
            }
        ),
    )
    gauge = np.array(IDS, dtype=object)[records.gauge_index]
    write_table(
        folder / "accounting.csv",
        pd.DataFrame(
            {
                "file": "peaks.csv",
                "row": np.arange(2, len(gauge) + 2),
                "gauge_id": gauge,
                "water_year": records.water_year,
                "fate": np.where(records.water_year == 1965, "excluded", "used").astype(object),
                "reason": np.where(records.water_year == 1965, "flag regulated", "systematic peak").astype(
                    object
                ),
                "decided_by": np.where(records.water_year == 1965, "flag regulated", "default").astype(
                    object
                ),
            }
        ),
    )
    # 000 / 001: polygons that overlap; 003 / 004: polygons side by side; 005 / 006: none.
    write_table(
        folder / "basins.csv",
        pd.DataFrame(
            {
                "site_id": ["000", "001", "003", "004"],
                "wkt": [
                    square(lat[0], 8.0, 10),
                    square(lat[1], 8.0, 6),
                    square(lat[3], 8.0, 1.5),
                    square(lat[4], 8.0, 1.5),
                ],
            }
        ),
    )
    write_table(
        folder / "periods.csv",
        pd.DataFrame(
            {
                "gauge_id": [DATED],
                "first_year": [2010],
                "last_year": [2040],
                "state": "regulated",
                "use": False,
                "why": "dam",
            }
        ),
    )
    names = (
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
    )
    rows = [
        ("2025-01-01", "A", "gauge", "exclude", "backwater of the lake", LEDGER_OUT),
        ("2025-01-01", "A", "gauge", "keep", "only gauge of the valley", LEDGER_KEEP),
        ("2025-01-01", "A", "gauge", "keep", "new gauge", HOPELESS),
    ]
    table = pd.DataFrame([(*row, "", "", "", "", "") for row in rows + (ledger_rows or [])], columns=names)
    write_table(folder / "ledger.csv", table)


@pytest.fixture(scope="module")
def study(tmp_path_factory):
    folder = tmp_path_factory.mktemp("study")
    lay_down(folder / "work" / "intake")
    study = StudyFiles(StudyConfig(), folder / "study.yaml")
    screen.run(study)
    dependence.run(study)
    return study


@pytest.fixture(scope="module")
def gauges(study):
    return read_sites(study.work("screen") / "gauges.csv").set_index("gauge_id")


def test_the_right_gauges_are_used(gauges):
    out = {"001", "006", SHORT, REGULATED, LEDGER_OUT, HOPELESS}
    assert out == set(gauges.index[~gauges["used"]])


@pytest.mark.parametrize(
    ("gauge_id", "words"),
    [
        ("001", "redundant with 000 (longer record, 50 peaks against 40; 100 % of the smaller basin shared)"),
        (
            "006",
            "redundant with 005 (longer record, 50 peaks against 40; no polygons to tell whether nested)",
        ),
        (SHORT, "8 peaks, fewer than 10"),
        (REGULATED, "floods are regulated"),
        (LEDGER_OUT, "ledger: backwater of the lake"),
        (LEDGER_KEEP, "kept by the ledger (in spite of: 8 peaks, fewer than 10): only gauge of the valley"),
        (HOPELESS, "3 peaks, fewer than 10"),
    ],
)
def test_reasons_say_what_decided(gauges, gauge_id, words):
    assert gauges.loc[gauge_id, "reasons"].startswith(words)


def test_a_gauge_whose_regulated_years_are_dated_is_used_for_the_rest(gauges):
    assert gauges.loc[DATED, "used"]


def test_records_are_those_of_used_gauges(study, gauges):
    frame = read_table(study.work("screen") / "records.csv")
    assert set(gauges.index[gauges["used"]]) == set(frame["gauge_id"])


def test_every_input_row_is_accounted_for_and_rows_of_unused_gauges_are_excluded(study, gauges):
    before = read_table(study.work("intake") / "accounting.csv", text=("reason", "decided_by"))
    after = read_table(study.work("screen") / "accounting.csv", text=("reason", "decided_by"))
    assert list(after.columns) == ["file", "row", "gauge_id", "water_year", "fate", "reason", "decided_by"]
    pd.testing.assert_frame_equal(before[["file", "row", "gauge_id"]], after[["file", "row", "gauge_id"]])
    unused = ~gauges["used"].loc[after["gauge_id"]].to_numpy()
    assert set(after.loc[unused, "fate"]) == {"excluded"}
    already = (before["fate"] == "excluded").to_numpy()
    assert set(after.loc[already, "reason"]) == {"flag regulated"}
    assert after.loc[~unused].equals(before.loc[~unused])
    out = after[(after["gauge_id"] == LEDGER_OUT) & ~already]
    assert set(out["decided_by"]) == {"ledger"}
    assert set(out["reason"]) == {"gauge not used: ledger: backwater of the lake"}


def test_the_share_of_disturbed_years_is_reported(gauges):
    np.testing.assert_allclose(1 / 50, gauges.loc["000", "disturbed_share"])
    assert gauges.loc[SHORT, "disturbed_share"] == 0.0


def test_pairs_tell_what_became_of_them(study):
    pairs = read_table(study.work("screen") / "redundant_pairs.csv", text=("dropped", "decided_by", "why"))
    assert pairs[["gauge_id", "other_id", "dropped"]].to_numpy().tolist() == [
        ["000", "001", "001"],
        ["003", "004", ""],
        ["005", "006", "006"],
    ]
    np.testing.assert_array_equal([False, False, True], pairs["overlap_share"].isna())


def test_the_contribution_holds_the_tables_of_the_contract(study):
    given = read_contribution(study.work("screen"))
    assert [table.name for table in given.tables] == [
        "gauge_screening",
        "record_accounting",
        "redundant_pairs",
    ]
    needed = {
        "gauge_id",
        "n_peaks",
        "first_year",
        "last_year",
        "trend_p",
        "lag1_correlation",
        "used",
        "reasons",
    }
    assert needed <= set(given.tables[0].frame.columns)
    assert given.sections[0].key == "screening"
    assert "8 of 14 gauges are used." in given.sections[0].paragraphs[0]
    assert [fault.code for fault in given.warnings] == ["kept_gauge_too_short", "nested_without_polygons"]
    for figure in given.sections[0].figures:
        assert (study.work("screen") / "figures" / figure.file).stat().st_size > 5000


def test_the_order_of_input_rows_changes_no_byte(study, tmp_path):
    lay_down(tmp_path / "work" / "intake")
    intake = tmp_path / "work" / "intake"
    for name in ("records", "redundant", "ledger", "basins"):
        path = intake / f"{name}.csv"
        if path.exists():
            head, *rows = path.read_text(encoding="utf-8").splitlines()
            path.write_text("\n".join([head, *rows[::-1]]) + "\n", encoding="utf-8")
    again = StudyFiles(StudyConfig(), tmp_path / "study.yaml")
    screen.run(again)
    for name in ("gauges.csv", "records.csv", "accounting.csv", "redundant_pairs.csv", "figures/trends.png"):
        assert (study.work("screen") / name).read_bytes() == (again.work("screen") / name).read_bytes()


def test_the_latest_line_of_the_ledger_counts(tmp_path):
    later = [("2025-02-01", "A", "gauge", "keep", "the lake was lowered", LEDGER_OUT)]
    lay_down(tmp_path / "work" / "intake", later)
    again = StudyFiles(StudyConfig(), tmp_path / "study.yaml")
    screen.run(again)
    gauges = read_sites(again.work("screen") / "gauges.csv").set_index("gauge_id")
    assert gauges.loc[LEDGER_OUT, "used"]


def test_a_study_without_a_usable_gauge_stops_with_a_fault(tmp_path):
    lay_down(tmp_path / "work" / "intake")
    ledger = tmp_path / "work" / "intake" / "ledger.csv"
    ledger.write_text(ledger.read_text(encoding="utf-8").splitlines()[0] + "\n", encoding="utf-8")
    config = StudyConfig.model_validate({"screening": {"minimum_peaks": 60}})
    with pytest.raises(StudyFaults) as stopped:
        screen.run(StudyFiles(config, tmp_path / "study.yaml"))
    assert [fault.code for fault in stopped.value.problems] == ["no_gauge_left"]


def test_dependence_is_fitted_to_used_gauges_alone(study, gauges):
    content = json.loads((study.work("dependence") / "model.json").read_text(encoding="utf-8"))
    used = gauges.index[gauges["used"]].tolist()
    long = [len(r) for _, r in read_table(study.work("screen") / "records.csv").groupby("gauge_id")]
    n = sum(k >= 25 for k in long)
    assert content["pairs"] == n * (n - 1) // 2 < len(used) * (len(used) - 1) // 2
    model = DistanceModel.from_dict(content)
    # Every record is 0.8 shared noise: all pairs are correlated by 0.64, whatever their distance.
    np.testing.assert_allclose(0.64, model.correlation(200.0), atol=0.1)
    np.testing.assert_allclose(0.64, content["average_correlation"], atol=0.1)


def test_the_dependence_section_and_bins_agree_with_the_model(study):
    given = read_contribution(study.work("dependence"))
    tables = {table.name: table.frame for table in given.tables}
    model, bins = tables["concurrent_correlation_model"], tables["concurrent_correlation_bins"]
    assert model["adopted"].tolist() == [True, False]
    assert bins["pairs"].sum() == model["pairs"].iloc[0]
    assert (bins["correlation_lower"] <= bins["correlation"]).all()
    assert f"{model['pairs'].iloc[0]} pairs of gauges share at least" in given.sections[0].paragraphs[0]
    assert (study.work("dependence") / "figures" / given.sections[0].figures[0].file).stat().st_size > 5000


def test_records_survive_the_handover(study, gauges):
    used = gauges.index[gauges["used"]].tolist()
    assert read_records(study.work("screen") / "records.csv", used).n_gauges == len(used)
