from dataclasses import replace

import numpy as np
import pytest
from statsmodels.datasets import nile

from wrackline.hydrology.records import exact_records
from wrackline.hydrology.screening import ScreeningSettings, add_flag, screen_records
from wrackline.stats.trends import false_discovery_p

SETTINGS = ScreeningSettings()


def one_gauge(years, flow):
    return exact_records(["A"], [0, len(flow)], np.asarray(years), np.asarray(flow, dtype=float))


def flags_of(result, gauge=0):
    return [f.flag for f in result.flags if f.gauge == gauge]


@pytest.fixture(scope="module")
def many():
    """Thirty gauges of 15 to 60 years with gaps, tied flows and a few zeros."""
    rng = np.random.default_rng(41)
    n = rng.integers(15, 61, 30)
    offsets = np.concatenate([[0], np.cumsum(n)])
    years = np.concatenate([np.sort(rng.choice(np.arange(1920, 2000), k, replace=False)) for k in n])
    flow = np.round(10 ** rng.normal(2, 0.3, offsets[-1]))
    flow[rng.uniform(size=len(flow)) < 0.02] = 0.0
    return exact_records([f"G{i:02d}" for i in range(30)], offsets, years, flow)


def test_the_nile_is_flagged_for_what_it_is_known_for():
    data = nile.load_pandas().data
    result = screen_records(one_gauge(data["year"].astype(int), data["volume"]), [False], SETTINGS)
    assert flags_of(result) == ["trend", "change_point", "serial_correlation"]
    assert result.change_point_year[0] == 1898
    # Mann-Kendall of the Nile: see tests/reference/nile_screening.json.
    np.testing.assert_allclose(3.658263e-05, result.trend_p[0], atol=5e-12)
    assert result.trend_p_serial[0] > result.trend_p[0]
    assert (result.n_peaks[0], result.first_year[0], result.last_year[0], result.gap_years[0]) == (
        100,
        1871,
        1970,
        0,
    )


def test_a_slope_of_two_percent_a_decade_is_reported_as_that():
    years = np.arange(1950, 2000)
    result = screen_records(one_gauge(years, 100 * 1.02 ** ((years - 1950) / 10)), [False], SETTINGS)
    np.testing.assert_allclose(2.0, result.sen_slope[0], rtol=1e-9)
    np.testing.assert_allclose(1.0, result.trend_tau[0])


def test_short_regulated_and_broken_records_are_flagged():
    result = screen_records(one_gauge([1950, 1951, 1990, 2000], [3, 5, 4, 6]), [True], SETTINGS)
    assert flags_of(result) == ["short_record", "regulated", "long_gaps"]
    assert (result.span[0], result.gap_years[0]) == (51, 47)
    assert result.excluded(SETTINGS.exclude).tolist() == [True]


def test_a_flood_far_above_the_median_is_flagged():
    result = screen_records(one_gauge(range(1950, 1970), [10.0, 20.0] * 9 + [10.0, 640.0]), [False], SETTINGS)
    np.testing.assert_allclose(np.log10(640 / 15), result.largest_over_median[0], rtol=1e-12)
    assert "extreme_flood" in flags_of(result)
    assert not result.excluded(SETTINGS.exclude)[0]


def test_false_discovery_control_judges_all_gauges_together(many):
    together = screen_records(many, np.zeros(30, bool), SETTINGS)
    np.testing.assert_allclose(false_discovery_p(together.trend_p_serial), together.trend_p_adjusted)
    one_by_one = screen_records(many, np.zeros(30, bool), replace(SETTINGS, false_discovery_control=False))
    np.testing.assert_array_equal(one_by_one.trend_p_serial < 0.05, one_by_one.flagged("trend"))
    assert together.flagged("trend").sum() <= one_by_one.flagged("trend").sum()


def test_the_unit_of_flow_and_the_order_of_gauges_change_nothing(many):
    expected = screen_records(many, np.zeros(30, bool), SETTINGS)
    order = np.random.default_rng(0).permutation(30)
    shuffled = many.keep_gauges(order)
    in_feet = exact_records(
        shuffled.gauge_ids, shuffled.offsets, shuffled.water_year, shuffled.flow_low * 35.3147
    )
    found = screen_records(in_feet, np.zeros(30, bool), SETTINGS)
    for name in ("trend_p", "change_point_p", "lag1_correlation", "sen_slope", "largest_over_median"):
        np.testing.assert_allclose(getattr(expected, name)[order], getattr(found, name), rtol=1e-9, atol=1e-9)
    np.testing.assert_array_equal(expected.change_point_year[order], found.change_point_year)


def test_a_gauge_alone_gets_the_statistics_it_gets_among_others(many):
    among = screen_records(many, np.zeros(30, bool), SETTINGS)
    alone = screen_records(many.keep_gauges([7]), [False], SETTINGS)
    for name in (
        "trend_p",
        "trend_p_serial",
        "sen_slope",
        "change_point_p",
        "lag1_correlation",
        "n_peaks",
        "span",
    ):
        np.testing.assert_array_equal(getattr(among, name)[7], getattr(alone, name)[0])


def test_peaks_below_a_level_are_tied_at_it():
    years, flow = np.arange(1960, 1980), np.array([30.0, 25, 60, 10, 80, 20, 40, 15, 90, 35] * 2)
    level = 20.0
    tied = one_gauge(years, np.maximum(flow, level))
    records = one_gauge(years, flow)
    below = flow < level
    # Half of them are told by a row of the peak table, half by the threshold alone.
    told = below & (np.arange(20) < 10)
    censored = replace(
        records,
        flow_low=np.where(below, 0.0, flow),
        flow_high=np.where(below, level, flow),
        perception_low=np.full(20, level),
        observed=~below | told,
    )
    expected = screen_records(tied, [False], SETTINGS)
    found = screen_records(censored, [False], SETTINGS)
    for name in ("trend_p", "trend_tau", "sen_slope", "change_point_p", "lag1_correlation"):
        np.testing.assert_array_equal(getattr(expected, name), getattr(found, name))
    assert found.n_peaks[0] == 16
    assert found.gap_years[0] == 0


def test_smaller_exact_peaks_are_tied_with_those_known_to_lie_below_a_level():
    years = np.arange(1960, 1972)
    flow = np.array([9.0, 50, 60, 70, 55, 8, 65, 75, 52, 58, 0, 62])
    records = replace(one_gauge(years, flow), flow_high=np.where(flow == 0, 20.0, flow))
    expected = screen_records(one_gauge(years, np.maximum(flow, 20.0)), [False], SETTINGS)
    found = screen_records(records, [False], SETTINGS)
    assert expected.trend_tau[0] == found.trend_tau[0]


def test_historic_years_and_their_high_threshold_stay_out_of_the_tests():
    years, flow = np.arange(1960, 1990), 10 ** np.random.default_rng(1).normal(2, 0.2, 30)
    expected = screen_records(one_gauge(years, flow), [False], SETTINGS)
    all_years = np.concatenate([np.arange(1930, 1960), years])
    silent = all_years < 1960
    padded = np.concatenate([np.zeros(30), flow])
    padded[5] = 900.0
    silent[5] = False
    records = replace(
        one_gauge(all_years, padded),
        flow_high=np.where(silent, 500.0, padded),
        historic=all_years == 1935,
        observed=~silent,
    )
    found = screen_records(records, [False], SETTINGS)
    for name in (
        "n_peaks",
        "first_year",
        "span",
        "trend_p",
        "sen_slope",
        "change_point_p",
        "largest_over_median",
    ):
        np.testing.assert_array_equal(getattr(expected, name), getattr(found, name))


def test_a_gauge_without_peaks_is_short_and_nothing_else():
    records = exact_records(["A", "B"], [0, 0, 20], np.arange(1950, 1970), np.linspace(5, 9, 20))
    result = screen_records(records, [False, False], SETTINGS)
    assert flags_of(result) == ["short_record"]
    assert (result.n_peaks[0], result.first_year[0], result.span[0]) == (0, 0, 0)
    assert np.isnan(result.trend_p[0])


def test_zeros_and_equal_flows_are_survived():
    years = np.tile(np.arange(1950, 1970), 2)
    flow = np.concatenate([np.zeros(20), np.full(20, 7.0)])
    result = screen_records(exact_records(["Z", "E"], [0, 20, 40], years, flow), [False, False], SETTINGS)
    np.testing.assert_array_equal([1.0, 1.0], result.trend_p)
    np.testing.assert_array_equal([0.0, 0.0], result.sen_slope)
    assert np.isnan(result.largest_over_median[0])
    assert result.flags == ()


def test_a_flag_can_be_added(many):
    result = add_flag(
        screen_records(many, np.zeros(30, bool), SETTINGS), "redundant", {3: "redundant with G01"}
    )
    assert result.flagged("redundant").nonzero()[0].tolist() == [3]
    assert result.excluded(("redundant",))[3]
