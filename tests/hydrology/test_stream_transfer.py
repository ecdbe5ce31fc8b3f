"""A gauge's departure from the region carried along its stream."""

import numpy as np
import pytest

from wrackline.hydrology.stream_transfer import (
    StreamGauge,
    transfer_along_stream,
    transfer_factor,
    transfer_share,
)


def gauge(area, departure, variance=0.004, regional=(2.0, 2.3)):
    regional = np.array(regional)
    return StreamGauge(area, regional + np.log10(departure), np.full(2, variance), regional)


@pytest.mark.parametrize(
    ("area", "factor"), [(60.0, 1.04), (75.0, 1.1), (100.0, 1.2), (125.0, 1.1), (150.0, 1.0), (300.0, 1.0)]
)
def test_factor_is_whole_at_equal_area_and_one_at_half_as_much_again(area, factor):
    # Computed from the proration's algebra: departure 1.2 at a gauge of 100.
    assert factor == pytest.approx(float(transfer_factor(1.2, transfer_share(area, 100.0))), rel=1e-12)


def test_with_area_alone_a_whole_share_is_the_drainage_area_ratio():
    # 500 * 1.3^0.7 = 600.800590646 (computed); the regional equation goes with area to the power 0.7.
    exponent, constant = 0.7, 1.1
    at_gauge, at_site = (constant + exponent * np.log10(a) for a in (100.0, 130.0))
    departure = 500.0 / 10**at_gauge
    assert 600.800590646 == pytest.approx(float(10**at_site * transfer_factor(departure, 1.0)), rel=1e-9)


def test_same_place_takes_over_the_gauges_flood_and_its_variance():
    found = transfer_along_stream(100.0, np.array([2.0, 2.3]), np.full(2, 0.03), [gauge(100.0, 1.5)], 50)
    np.testing.assert_allclose(found.log10_flow[0], np.array([2.0, 2.3]) + np.log10(1.5), rtol=1e-12)
    np.testing.assert_allclose(found.variance[0], 0.004, rtol=1e-12)


def test_at_the_limit_only_the_regional_estimate_is_left():
    near = transfer_along_stream(149.9999, np.array([2.1, 2.4]), np.full(2, 0.03), [gauge(100.0, 1.5)], 50)
    np.testing.assert_allclose(near.log10_flow[0], [2.1, 2.4], atol=1e-5)
    np.testing.assert_allclose(near.variance[0], 0.03, rtol=1e-4)
    assert (
        transfer_along_stream(151.0, np.array([2.1, 2.4]), np.full(2, 0.03), [gauge(100.0, 1.5)], 50) is None
    )


def test_between_two_gauges_departures_are_interpolated_in_log_area():
    pair = [gauge(80.0, 1.5), gauge(125.0, 0.9)]
    found = transfer_along_stream(100.0, np.array([2.0, 2.3]), np.full(2, 0.03), pair, 50)
    middle = 0.5 * (np.log10(1.5) + np.log10(0.9))
    np.testing.assert_allclose(found.log10_flow[0], np.array([2.0, 2.3]) + middle, rtol=1e-12)
    alone = transfer_along_stream(100.0, np.array([2.0, 2.3]), np.full(2, 0.03), pair[:1], 50)
    assert (found.variance < alone.variance).all()
