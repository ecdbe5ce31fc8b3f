"""Low floods as intervals, and plotting positions around thresholds."""

from dataclasses import replace

import numpy as np
import pytest

from wrackline.hydrology.low_floods import screen_low_floods, set_apart_low_floods
from wrackline.hydrology.plotting_positions import NUMERATORS, plot_positions
from wrackline.hydrology.records import exact_records


def one_gauge(flows):
    return exact_records(
        ["g"], np.array([0, len(flows)]), np.arange(len(flows)), np.asarray(flows, dtype=float)
    )


def test_peaks_equal_to_the_threshold_are_retained():
    records = one_gauge([5, 10, 10, 20, 30])
    low = screen_low_floods(records, [10.0])
    assert (1, 10.0, True) == (low.count[0], low.threshold[0], low.overridden[0])
    treated = set_apart_low_floods(records, low.threshold)
    np.testing.assert_array_equal([0, 10, 10, 20, 30], treated.flow_low)
    np.testing.assert_array_equal([10, 10, 10, 20, 30], treated.flow_high)
    np.testing.assert_array_equal(np.full(5, 10.0), treated.perception_low)


def test_without_low_floods_the_records_stay_as_they_are():
    records = one_gauge([5, 10, 10, 20, 30])
    treated = set_apart_low_floods(records, [0.0])
    np.testing.assert_array_equal(records.flow_low, treated.flow_low)
    np.testing.assert_array_equal(records.perception_low, treated.perception_low)


def test_zero_peaks_lie_below_the_smallest_positive_peak_when_nothing_else_is_low():
    records = one_gauge([0, 0, 90, 95, 100, 105, 110, 120, 130, 140, 150, 160])
    low = screen_low_floods(records, [0.0])
    assert (2, 2, 90.0) == (low.zeros[0], low.count[0], low.threshold[0])


def test_interval_across_the_threshold_keeps_its_ends_and_lower_ones_are_widened():
    records = one_gauge([50, 60, 70, 80])
    records = replace(
        records, flow_low=np.array([5.0, 0.0, 70, 80]), flow_high=np.array([50.0, 20.0, 70, 80])
    )
    treated = set_apart_low_floods(records, [30.0])
    np.testing.assert_array_equal([5, 0, 70, 80], treated.flow_low)
    np.testing.assert_array_equal([50, 30, 70, 80], treated.flow_high)


def test_historic_peaks_are_not_tested():
    flows = [1.0, *np.geomspace(80, 200, 30)]
    records = replace(one_gauge(flows), historic=np.arange(31) == 0)
    assert screen_low_floods(records).count[0] == 0
    assert screen_low_floods(one_gauge(flows)).count[0] >= 1


@pytest.mark.parametrize(("name", "expected"), [("weibull", 1 / 6), ("hazen", 0.1), ("cunnane", 0.6 / 5.2)])
def test_numerators_by_name(name, expected):
    assert expected == pytest.approx(plot_positions(one_gauge([1, 2, 3, 4, 5]), name)[4])


def test_unknown_numerator_is_refused_with_the_choices():
    with pytest.raises(ValueError, match=", ".join(NUMERATORS)):
        plot_positions(one_gauge([1, 2, 3]), "benson")


def test_positions_fall_as_floods_rise_whatever_the_thresholds():
    stream = np.random.default_rng(4)
    flows = np.round(np.exp(stream.normal(4, 1, 80)), 3)
    level = np.repeat([0.0, 30.0, 150.0, 60.0], 20)
    known = flows >= level
    records = replace(
        one_gauge(flows),
        flow_low=np.where(known, flows, 0.0),
        flow_high=np.where(known, flows, level),
        perception_low=level,
    )
    aep = plot_positions(records)
    assert np.isnan(aep[~known]).all()
    order = np.argsort(-flows[known])
    assert (np.diff(aep[known][order]) > 0).all()
    assert ((aep[known] > 0) & (aep[known] < 1)).all()


def test_floods_known_only_as_larger_take_the_ranks_above():
    records = one_gauge([5.0, 10, 10, 20, 30])
    records = replace(records, flow_high=np.array([5.0, np.inf, 10, 20, np.inf]))
    # Weibull positions of ranks 5, 3 and 2 of five.
    np.testing.assert_allclose([5 / 6, np.nan, 4 / 6, 2 / 6, np.nan], plot_positions(records), rtol=1e-12)
