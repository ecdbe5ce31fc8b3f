import numpy as np
import pytest

from wrackline.hydrology.distances import EARTH_RADIUS_KM, great_circle_km
from wrackline.hydrology.redundancy import PairDecision, find_nested_pairs, resolve_redundancy

KM_NORTH = np.degrees(1 / EARTH_RADIUS_KM)


def along_a_line(ids, km, areas, years, overlap=None, **rest):
    lat, lon = 45 + KM_NORTH * np.asarray(km, dtype=float), np.full(len(ids), 8.0)
    pairs = find_nested_pairs(lat, lon, areas)
    shares = np.full(len(pairs), np.nan) if overlap is None else np.asarray(overlap)
    return resolve_redundancy(ids, lat, lon, areas, years, pairs, shares, **rest)


def gone(result, ids):
    return {ids[i] for i in result.drop_reasons}


def test_the_tree_finds_what_all_pairs_would():
    rng = np.random.default_rng(3)
    g = 400
    lat, lon, area = 45 + rng.uniform(0, 1.5, g), 7 + rng.uniform(0, 2, g), 10 ** rng.uniform(0, 4, g)
    d = great_circle_km(lat[:, None], lon[:, None], lat, lon)
    near = d / np.sqrt((area[:, None] + area) / 2) <= 0.5
    alike = np.maximum(area[:, None] / area, area / area[:, None]) <= 5
    expected = np.argwhere(np.triu(near & alike, k=1))
    found = find_nested_pairs(lat, lon, area)
    assert len(expected) > 100
    np.testing.assert_array_equal(expected, np.column_stack([found.first, found.second]))


def test_the_shorter_record_goes():
    result = along_a_line(["A", "B"], [0, 3], [100, 120], [30, 45])
    assert gone(result, ["A", "B"]) == {"A"}
    assert "45 peaks against 30" in result.drop_reasons[0]
    assert result.dropped.tolist() == [0]


def test_equal_records_are_told_apart_by_identifier():
    assert gone(along_a_line(["B", "A"], [0, 3], [100, 120], [30, 30]), ["B", "A"]) == {"B"}


def test_a_gauge_that_goes_takes_no_other_with_it():
    # A - B - C in a row: B is nested with both, A and C are apart.
    ids = ["A", "B", "C"]
    result = along_a_line(ids, [0, 4, 8], [100, 100, 100], [50, 40, 30])
    assert len(result.pairs) == 2
    assert gone(result, ids) == {"B"}
    assert result.why[1] == "no conflict: B goes for another pair"


def test_basins_that_do_not_overlap_both_stay():
    result = along_a_line(["A", "B"], [0, 3], [100, 120], [30, 45], overlap=[0.04])
    assert result.drop_reasons == {}
    assert result.why == ("not nested: the basins share 4 % of the smaller one",)


def test_basins_that_overlap_are_nested():
    result = along_a_line(["A", "B"], [0, 3], [100, 120], [30, 45], overlap=[0.97])
    assert "97 % of the smaller basin shared" in result.drop_reasons[0]


@pytest.mark.parametrize(("keep", "expected"), [(0, {"B"}), (1, {"A"}), (None, set())])
def test_the_analyst_decides(keep, expected):
    decision = PairDecision(1, 0, keep, "better rating")
    result = along_a_line(["A", "B"], [0, 3], [100, 120], [30, 45], decisions=[decision])
    assert gone(result, ["A", "B"]) == expected
    assert result.decided_by == ("redundancy.csv",)


def test_the_analyst_may_decide_on_a_pair_that_is_no_candidate():
    decision = PairDecision(0, 1, 0, "same flood routed through one reservoir")
    result = along_a_line(["A", "B"], [0, 90], [100, 120], [30, 45], decisions=[decision])
    assert gone(result, ["A", "B"]) == {"B"}
    np.testing.assert_allclose([90.0], result.pairs.distance_km, rtol=1e-9)


def test_a_gauge_out_for_other_reasons_pushes_nobody_out():
    decision = PairDecision(0, 1, 0, "better rating")
    result = along_a_line(
        ["A", "B"], [0, 3], [100, 120], [45, 30], decisions=[decision], eligible=[False, True]
    )
    assert result.drop_reasons == {}
    assert "A is not used" in result.why[0]


def test_a_gauge_the_ledger_keeps_stays_whatever_its_length():
    result = along_a_line(["A", "B"], [0, 3], [100, 120], [12, 45], protected=[True, False])
    assert gone(result, ["A", "B"]) == {"B"}
    assert result.decided_by == ("ledger",)


def test_the_order_of_gauges_does_not_matter():
    rng = np.random.default_rng(8)
    g = 60
    ids = [f"G{i:02d}" for i in range(g)]
    lat, lon, area = 45 + rng.uniform(0, 0.4, g), 7 + rng.uniform(0, 0.5, g), 10 ** rng.uniform(1, 3, g)
    years = rng.integers(20, 30, g)

    def kept(order):
        pairs = find_nested_pairs(lat[order], lon[order], area[order])
        names = [ids[i] for i in order]
        result = resolve_redundancy(
            names, lat[order], lon[order], area[order], years[order], pairs, np.full(len(pairs), np.nan)
        )
        return gone(result, names)

    expected = kept(np.arange(g))
    assert len(expected) > 5
    assert expected == kept(rng.permutation(g))


def test_no_two_gauges_that_stay_are_nested():
    rng = np.random.default_rng(9)
    g = 80
    lat, lon, area = 45 + rng.uniform(0, 0.4, g), 7 + rng.uniform(0, 0.5, g), 10 ** rng.uniform(1, 3, g)
    pairs = find_nested_pairs(lat, lon, area)
    result = resolve_redundancy(
        [f"{i:03d}" for i in range(g)],
        lat,
        lon,
        area,
        rng.integers(10, 90, g),
        pairs,
        np.full(len(pairs), np.nan),
    )
    stays = np.ones(g, dtype=bool)
    stays[list(result.drop_reasons)] = False
    assert not (stays[pairs.first] & stays[pairs.second]).any()
    # And nobody goes without being nested with one that stays.
    for i in result.drop_reasons:
        partners = np.concatenate([pairs.second[pairs.first == i], pairs.first[pairs.second == i]])
        assert stays[partners].any()


def test_fewer_than_two_gauges_have_no_pairs():
    assert len(find_nested_pairs([], [], [])) == 0
    assert len(find_nested_pairs([45.0], [7.0], [100.0])) == 0
